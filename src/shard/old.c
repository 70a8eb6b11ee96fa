#include "shard/old.h"

#include "shard/batch.h"
#include "shard/keyrun.h"
#include "shard/linkrun.h"
#include "shard/records.h"
#include "store/inlinks.h"
#include "store/layout.h"

#include <stdlib.h>
#include <string.h>

#define REPLACED UINT64_MAX
#define FOLDED (UINT64_MAX - 1)

struct alias {
    uint64_t page;
    size_t to_at;            /* in alias_keys: the key that it stands for */
    size_t to_bytes;
};

/* Links on their way into a batch. They are collected as page ids, and their keys then read in order. */
#define PAIRS_MOST (1u << 20)
struct pair {
    uint64_t source, target; /* target NOBODY: the page was fetched, and may have no links */
};
#define NOBODY UINT64_MAX

struct divert {
    struct windrow_batch *batch;
    struct pair *pairs;
    size_t pair_count;
    const char *scratch;
    uint64_t next_run;
    struct windrow_buffer *run_pages;
    struct windrow_old_counts *counts;
};

struct old {
    const struct windrow_store *store;
    const struct windrow_store_facts *facts;
    struct windrow_page_reader *pages;
    uint64_t *replaced;      /* a bit a page: its links go, for it was fetched again or is taken down */
    uint64_t *gone;          /* a bit a page: it is taken down, and so are the links to it */
    uint64_t *folded;        /* a bit a page: it has become an alias, so that its links go through a batch; NULL: none has */
    uint64_t *linked;        /* a bit a page: a link to it stays */
    uint32_t *degrees;       /* by core number: its links that stay */
    uint64_t *locals;        /* by core number: its local id in the run; REPLACED or FOLDED where its links do not go there */
    struct windrow_meter *meter;
    struct alias *aliases;   /* pages that have become aliases, by what they stand for now */
    size_t alias_count;
    struct windrow_buffer alias_keys;
    struct divert divert;
};

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory for the earlier store");
}

static bool bit(const uint64_t *bits, uint64_t index)
{
    return bits[index / 64] >> (index % 64) & 1;
}

static bool is_folded(const struct old *old, uint64_t page)
{
    return old->folded && bit(old->folded, page);
}

static void set(uint64_t *bits, uint64_t index)
{
    bits[index / 64] |= UINT64_C(1) << (index % 64);
}

static int alias_order(const void *a, const void *b, void *context)
{
    const struct alias *left = a, *right = b;
    const uint8_t *keys = ((struct old *)context)->alias_keys.data;
    return windrow_keyrun_compare(keys + left->to_at, left->to_bytes, keys + right->to_at, right->to_bytes);
}

/* Finds the store's pages that have become aliases. Both sides are in host order. */
static enum windrow_status find_aliases(struct old *old, const char *scratch, uint64_t words)
{
    struct windrow_records_reader table = {.frames.descriptor = -1};
    char *path = windrow_alias_path(scratch);
    enum windrow_status status = path ? windrow_records_reader_open(&table, path) : memory();
    size_t capacity = 0;
    while (!status && !(status = windrow_records_next(&table)) && !table.ended) {
        uint64_t page;
        status = windrow_page_reader_find_key(old->pages, (const char *)table.record.key, table.record.key_bytes, &page);
        if (status == WINDROW_NO) {
            status = WINDROW_OK;
            continue;
        }
        if (!status && old->alias_count == capacity) {
            capacity = capacity ? 2 * capacity : 1024;
            struct alias *aliases = realloc(old->aliases, capacity * sizeof *aliases);
            if (aliases)
                old->aliases = aliases;
            else
                status = memory();
        }
        if (!status && !old->folded && !(old->folded = calloc(words, 8)))
            status = memory();
        if (status)
            break;
        set(old->folded, page);
        old->aliases[old->alias_count++] = (struct alias){page, old->alias_keys.bytes, table.record.value_bytes};
        status = windrow_buffer_append(&old->alias_keys, table.record.value, table.record.value_bytes);
    }
    windrow_records_reader_close(&table);
    free(path);
    if (!status && old->alias_count)
        qsort_r(old->aliases, old->alias_count, sizeof *old->aliases, alias_order, old);
    return status;
}

/* A page that was fetched again replaces the links of all the pages that stand for it. */
static void mark_aliases_of(struct old *old, const uint8_t *key, size_t key_bytes)
{
    size_t low = 0, high = old->alias_count;
    while (low < high) {
        size_t middle = (low + high) / 2;
        const struct alias *alias = &old->aliases[middle];
        if (windrow_keyrun_compare(old->alias_keys.data + alias->to_at, alias->to_bytes, key, key_bytes) < 0)
            low = middle + 1;
        else
            high = middle;
    }
    for (; low < old->alias_count; low++) {
        const struct alias *alias = &old->aliases[low];
        if (windrow_keyrun_compare(old->alias_keys.data + alias->to_at, alias->to_bytes, key, key_bytes) != 0)
            break;
        set(old->replaced, alias->page);
    }
}

/* Marks the pages that a new batch fetched. Both sides are in host order, so each frame of pages is read once. */
static enum windrow_status mark_fetched(struct old *old, const char *run_path)
{
    struct windrow_keyrun_reader run = {.frames.descriptor = -1};
    enum windrow_status status = windrow_keyrun_reader_open(&run, run_path);
    while (!status && !(status = windrow_keyrun_next(&run)) && !run.ended) {
        uint64_t page;
        if (!run.crawled)
            continue;
        mark_aliases_of(old, run.key.data, run.key.bytes);
        status = windrow_page_reader_find_key(old->pages, (const char *)run.key.data, run.key.bytes, &page);
        if (!status)
            set(old->replaced, page);
        else if (status == WINDROW_NO)
            status = WINDROW_OK;
    }
    windrow_keyrun_reader_close(&run);
    return status;
}

static enum windrow_status mark_dropped(struct old *old, const struct windrow_drop_set *drop)
{
    for (uint64_t page = 0; page < old->facts->pages; page++) {
        const uint8_t *key;
        size_t key_bytes;
        enum windrow_status status = windrow_page_reader_key(old->pages, page, &key, &key_bytes);
        if (status)
            return status;
        if (windrow_drop_has(drop, (const char *)key, key_bytes)) {
            set(old->replaced, page);
            set(old->gone, page);
        }
    }
    return WINDROW_OK;
}

/* Goes through all in-links in page order, which interleaves the two kinds of target. */
struct walk {
    struct windrow_inlinks kinds[WINDROW_BLOCK_KINDS];
    struct windrow_inlinks *current;
    uint64_t page, pages_begun;
    bool more;
};

static void walk_begin(struct walk *walk, const struct windrow_store *store)
{
    *walk = (struct walk){0};
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
        windrow_inlinks_begin(&walk->kinds[kind], store, kind, 0);
}

/* The next list, or part of one; walk->page is its target. The caller knows when all pages were seen. */
static enum windrow_status walk_next(struct walk *walk, const struct windrow_store *store)
{
    if (!walk->more) {
        uint64_t number;
        walk->page = walk->pages_begun++;
        walk->current = &walk->kinds[windrow_store_page_number(store, walk->page, &number) ? WINDROW_BLOCK_CORE : WINDROW_BLOCK_RIM];
    }
    enum windrow_status status = windrow_inlinks_next(walk->current);
    if (!status && walk->current->ended)
        status = windrow_fail(WINDROW_DAMAGED, "the earlier store has fewer lists than pages; shard its dumps again");
    walk->more = !status && walk->current->more;
    return status;
}

static void walk_end(struct walk *walk)
{
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
        windrow_inlinks_end(&walk->kinds[kind]);
}

static enum windrow_status check_stop(const struct old *old, uint64_t links)
{
    if (!old->meter)
        return WINDROW_OK;
    windrow_meter_add(old->meter, links);
    return windrow_meter_stopping(old->meter) ? windrow_fail(WINDROW_STOPPED, "stopped at a checkpoint; run the same command again to go on") : WINDROW_OK;
}

/* First pass: which pages keep an in-link in the store's own run, and how many out-links each core page keeps there. */
static enum windrow_status count_links(struct old *old)
{
    struct walk walk;
    walk_begin(&walk, old->store);
    enum windrow_status status = WINDROW_OK;
    while (!status && (walk.pages_begun < old->facts->pages || walk.more)) {
        if ((status = walk_next(&walk, old->store)))
            break;
        if (!bit(old->gone, walk.page) && !is_folded(old, walk.page)) {
            bool linked = false;
            for (uint64_t index = 0; index < walk.current->count; index++) {
                uint64_t source = walk.current->sources[index];
                bool stays = old->locals[source] < FOLDED;
                old->degrees[source] += stays;
                linked |= stays;
            }
            if (linked)
                set(old->linked, walk.page);
        }
        status = check_stop(old, walk.current->count);
    }
    walk_end(&walk);
    return status;
}

/* True when a page is part of the run: it was fetched and not again since, or something that stays links to it. */
static bool survives(const struct old *old, uint64_t page)
{
    return !bit(old->gone, page) && !is_folded(old, page) &&
           (bit(old->linked, page) || (windrow_store_page_crawled(old->store, page) && !bit(old->replaced, page)));
}

static enum windrow_status write_keys(struct old *old, const char *path, uint64_t *page_count)
{
    struct windrow_keyrun_writer run;
    struct windrow_buffer before = {0};
    enum windrow_status status = windrow_keyrun_writer_open(&run, path);
    for (uint64_t page = 0; !status && page < old->facts->pages; page++) {
        const uint8_t *key;
        size_t key_bytes;
        uint64_t number;
        if (!survives(old, page))
            continue;
        if ((status = windrow_page_reader_key(old->pages, page, &key, &key_bytes)))
            break;
        bool core = windrow_store_page_number(old->store, page, &number), replaced = bit(old->replaced, page);
        if (core && !replaced)
            old->locals[number] = *page_count;
        size_t shared = windrow_keyrun_shared(before.data, before.bytes, key, key_bytes, 0);
        status = windrow_keyrun_put(&run, key, key_bytes, shared, core && !replaced ? old->degrees[number] : 0,
                                    !replaced && windrow_store_page_crawled(old->store, page));
        before.bytes = 0;
        if (!status)
            status = windrow_buffer_append(&before, key, key_bytes);
        ++*page_count;
    }
    if (!status)
        status = windrow_keyrun_writer_finish(&run);
    windrow_keyrun_writer_abandon(&run);
    windrow_buffer_free(&before);
    return status;
}

static int id_order(const void *a, const void *b)
{
    uint64_t left = *(const uint64_t *)a, right = *(const uint64_t *)b;
    return (left > right) - (left < right);
}

static int pair_order(const void *a, const void *b)
{
    const struct pair *left = a, *right = b;
    return left->source != right->source ? (left->source > right->source) - (left->source < right->source)
                                         : (left->target > right->target) - (left->target < right->target);
}

static enum windrow_status write_batch(struct divert *divert)
{
    if (windrow_batch_empty(divert->batch))
        return WINDROW_OK;
    struct windrow_batch_counts written;
    char *key_path = windrow_path(divert->scratch, "batch-%06llu.keys", (unsigned long long)divert->next_run);
    char *link_path = windrow_path(divert->scratch, "batch-%06llu.links", (unsigned long long)divert->next_run);
    enum windrow_status status = key_path && link_path ? windrow_batch_write(divert->batch, key_path, link_path, NULL, NULL, &written) : memory();
    free(key_path);
    free(link_path);
    if (status)
        return status;
    divert->next_run++;
    divert->counts->runs++;
    divert->counts->links += written.links;
    return windrow_buffer_append(divert->run_pages, &written.pages, sizeof written.pages);
}

/* The keys of some pages, by their sorted ids. */
struct keys {
    uint64_t *ids;
    size_t *at;              /* id_count + 1 places in text */
    size_t id_count;
    struct windrow_buffer text;
};

static enum windrow_status read_keys(struct old *old, struct keys *keys)
{
    const struct divert *divert = &old->divert;
    keys->ids = malloc((2 * divert->pair_count + 1) * sizeof *keys->ids);
    keys->at = malloc((2 * divert->pair_count + 2) * sizeof *keys->at);
    if (!keys->ids || !keys->at)
        return memory();
    size_t count = 0;
    for (size_t index = 0; index < divert->pair_count; index++) {
        keys->ids[count++] = divert->pairs[index].source;
        if (divert->pairs[index].target != NOBODY)
            keys->ids[count++] = divert->pairs[index].target;
    }
    qsort(keys->ids, count, sizeof *keys->ids, id_order);
    for (size_t index = 0; index < count; index++)
        if (!index || keys->ids[index] != keys->ids[index - 1])
            keys->ids[keys->id_count++] = keys->ids[index];
    for (size_t index = 0; index < keys->id_count; index++) {
        const uint8_t *key;
        size_t key_bytes;
        keys->at[index] = keys->text.bytes;
        enum windrow_status status = windrow_page_reader_key(old->pages, keys->ids[index], &key, &key_bytes);
        if (status || (status = windrow_buffer_append(&keys->text, key, key_bytes)))
            return status;
    }
    keys->at[keys->id_count] = keys->text.bytes;
    return WINDROW_OK;
}

static const char *key_of(const struct keys *keys, uint64_t id, size_t *key_bytes)
{
    const uint64_t *found = bsearch(&id, keys->ids, keys->id_count, sizeof *keys->ids, id_order);
    size_t index = (size_t)(found - keys->ids);
    *key_bytes = keys->at[index + 1] - keys->at[index];
    return (const char *)keys->text.data + keys->at[index];
}

/* Hands the collected links to the batch. */
static enum windrow_status flush_pairs(struct old *old)
{
    struct divert *divert = &old->divert;
    struct keys keys = {0};
    enum windrow_status status = read_keys(old, &keys);
    qsort(divert->pairs, divert->pair_count, sizeof *divert->pairs, pair_order);
    for (size_t index = 0; !status && index < divert->pair_count; index++) {
        const struct pair *pair = &divert->pairs[index];
        size_t key_bytes;
        const char *key = key_of(&keys, pair->source, &key_bytes);
        bool self;
        status = windrow_batch_source(divert->batch, key, key_bytes);
        if (!status && pair->target != NOBODY) {
            key = key_of(&keys, pair->target, &key_bytes);
            status = windrow_batch_target(divert->batch, key, key_bytes, &self);
        }
        if (!status)
            status = windrow_batch_line_end(divert->batch);
        if (!status && windrow_batch_full(divert->batch))
            status = write_batch(divert);
    }
    divert->pair_count = 0;
    free(keys.ids);
    free(keys.at);
    windrow_buffer_free(&keys.text);
    return status;
}

static enum windrow_status divert_pair(struct old *old, uint64_t source, uint64_t target)
{
    struct divert *divert = &old->divert;
    divert->pairs[divert->pair_count++] = (struct pair){source, target};
    return divert->pair_count == PAIRS_MOST ? flush_pairs(old) : WINDROW_OK;
}

/* Pages that have become aliases were fetched, whether or not they have links. */
static enum windrow_status divert_fetched(struct old *old)
{
    enum windrow_status status = WINDROW_OK;
    for (size_t index = 0; !status && index < old->alias_count; index++) {
        uint64_t page = old->aliases[index].page;
        if (windrow_store_page_crawled(old->store, page) && !bit(old->replaced, page))
            status = divert_pair(old, page, NOBODY);
    }
    return status;
}

/* Sources of one target on their way into the run, in entries of a bounded length. */
struct entry {
    uint64_t sources[WINDROW_LINKRUN_SOURCES];
    size_t count;
};

static enum windrow_status write_links(struct old *old, const char *path, struct windrow_old_counts *counts)
{
    struct windrow_linkrun_writer run;
    struct walk walk;
    struct entry *entry = malloc(sizeof *entry);
    enum windrow_status status = entry ? WINDROW_OK : memory();
    walk_begin(&walk, old->store);
    run.frames.writer.descriptor = -1;
    if (!status)
        status = windrow_linkrun_writer_open(&run, path);
    uint64_t local = 0;
    if (entry)
        entry->count = 0;
    while (!status && (walk.pages_begun < old->facts->pages || walk.more)) {
        if ((status = walk_next(&walk, old->store)))
            break;
        bool stays = survives(old, walk.page), folded = is_folded(old, walk.page);
        for (uint64_t index = 0; !status && !bit(old->gone, walk.page) && index < walk.current->count; index++) {
            uint64_t source = old->locals[walk.current->sources[index]];
            if (source == REPLACED)
                continue;
            if (folded || source == FOLDED) {
                status = divert_pair(old, windrow_store_core_page(old->store, walk.current->sources[index]), walk.page);
                continue;
            }
            /* An entry is written only when another source is known to follow, so that its "more" is true. */
            if (entry->count == WINDROW_LINKRUN_SOURCES) {
                status = windrow_linkrun_put(&run, local, entry->sources, entry->count, true);
                entry->count = 0;
            }
            entry->sources[entry->count++] = source;
            counts->links++;
        }
        if (!walk.more) {
            if (!status && entry->count)
                status = windrow_linkrun_put(&run, local, entry->sources, entry->count, false);
            entry->count = 0;
            local += stays;
        }
        if (!status)
            status = check_stop(old, walk.current->count);
    }
    if (!status)
        status = windrow_linkrun_writer_finish(&run);
    if (entry)
        windrow_linkrun_writer_abandon(&run);
    walk_end(&walk);
    free(entry);
    return status;
}

enum windrow_status windrow_old_write(const struct windrow_store *store, const char *scratch, uint64_t run, const struct windrow_fold *fold,
                                      uint64_t memory_bytes, struct windrow_meter *meter, struct windrow_buffer *run_pages,
                                      struct windrow_old_counts *counts)
{
    struct old old = {.store = store, .facts = windrow_store_facts(store), .meter = meter};
    uint64_t words = old.facts->pages / 64 + 1, cores = old.facts->core_pages, own_pages = 0;
    uint64_t needed = 4 * words * 8 + cores * 12 + (UINT64_C(4) << 20);
    *counts = (struct windrow_old_counts){0};
    if (needed > memory_bytes)
        return windrow_fail(WINDROW_RESOURCE, "adding to a store of this size takes %llu MiB; name a larger --memory", (unsigned long long)(needed >> 20) + 1);
    old.replaced = calloc(words, 8);
    old.gone = calloc(words, 8);
    old.linked = calloc(words, 8);
    old.degrees = calloc(cores + 1, sizeof *old.degrees);
    old.locals = calloc(cores + 1, sizeof *old.locals);
    char *key_path = windrow_path(scratch, "batch-%06llu.keys", (unsigned long long)run);
    char *link_path = windrow_path(scratch, "batch-%06llu.links", (unsigned long long)run);
    enum windrow_status status = WINDROW_OK;
    if (!old.replaced || !old.gone || !old.linked || !old.degrees || !old.locals || !key_path || !link_path)
        status = memory();
    if (!status)
        status = windrow_page_reader_create(store, &old.pages);
    if (!status && fold->with_aliases && fold->aliases.count)
        status = find_aliases(&old, scratch, words);
    if (!status && old.alias_count) {
        old.divert = (struct divert){.scratch = scratch, .next_run = run + 1, .run_pages = run_pages, .counts = counts};
        old.divert.pairs = malloc(PAIRS_MOST * sizeof *old.divert.pairs);
        status = old.divert.pairs ? windrow_batch_create((memory_bytes - needed) / 2, fold, &old.divert.batch) : memory();
    }
    for (uint64_t fetched = 0; !status && fetched < run; fetched++) {
        char *path = windrow_path(scratch, "batch-%06llu.keys", (unsigned long long)fetched);
        status = path ? mark_fetched(&old, path) : memory();
        free(path);
    }
    if (!status && fold->drop)
        status = mark_dropped(&old, fold->drop);
    for (uint64_t core = 0; !status && core < cores; core++) {
        uint64_t page = windrow_store_core_page(store, core);
        old.locals[core] = bit(old.replaced, page) ? REPLACED : is_folded(&old, page) ? FOLDED : 0;
    }
    if (!status)
        status = count_links(&old);
    if (!status)
        status = write_keys(&old, key_path, &own_pages);
    if (!status)
        status = windrow_buffer_append(run_pages, &own_pages, sizeof own_pages);
    counts->runs = 1;
    if (!status && old.alias_count)
        status = divert_fetched(&old);
    if (!status)
        status = write_links(&old, link_path, counts);
    if (!status && old.alias_count)
        status = flush_pairs(&old);
    if (!status && old.alias_count)
        status = write_batch(&old.divert);
    windrow_page_reader_destroy(old.pages);
    windrow_batch_destroy(old.divert.batch);
    windrow_buffer_free(&old.alias_keys);
    free(old.divert.pairs);
    free(old.aliases);
    free(old.replaced);
    free(old.gone);
    free(old.folded);
    free(old.linked);
    free(old.degrees);
    free(old.locals);
    free(key_path);
    free(link_path);
    return status;
}
