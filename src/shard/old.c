#include "shard/old.h"

#include "shard/keyrun.h"
#include "shard/linkrun.h"
#include "store/inlinks.h"
#include "store/layout.h"

#include <stdlib.h>
#include <string.h>

struct old {
    const struct windrow_store *store;
    const struct windrow_store_facts *facts;
    struct windrow_page_reader *pages;
    uint64_t *replaced;      /* a bit a page: its links go, for it was fetched again or is taken down */
    uint64_t *gone;          /* a bit a page: it is taken down, and so are the links to it */
    uint64_t *linked;        /* a bit a page: a link to it stays */
    uint32_t *degrees;       /* by core number: its links that stay */
    uint64_t *locals;        /* by core number: its local id in the run; UINT64_MAX: its links go */
    struct windrow_meter *meter;
};

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory for the earlier store");
}

static bool bit(const uint64_t *bits, uint64_t index)
{
    return bits[index / 64] >> (index % 64) & 1;
}

static void set(uint64_t *bits, uint64_t index)
{
    bits[index / 64] |= UINT64_C(1) << (index % 64);
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
        status = windrow_page_reader_find_key(old->pages, (const char *)run.key.data, run.key.bytes, &page);
        if (!status)
            set(old->replaced, page);
        else if (status == WINDROW_NO)
            status = WINDROW_OK;
    }
    windrow_keyrun_reader_close(&run);
    return status;
}

static enum windrow_status mark_dropped(struct old *old, windrow_old_dropped dropped, const void *context)
{
    for (uint64_t page = 0; page < old->facts->pages; page++) {
        const uint8_t *key;
        size_t key_bytes;
        enum windrow_status status = windrow_page_reader_key(old->pages, page, &key, &key_bytes);
        if (status)
            return status;
        if (dropped(context, key, key_bytes)) {
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

/* First pass: which pages keep an in-link, and how many out-links each core page keeps. locals[] is 0 or UINT64_MAX by now. */
static enum windrow_status count_links(struct old *old)
{
    struct walk walk;
    walk_begin(&walk, old->store);
    enum windrow_status status = WINDROW_OK;
    while (!status && (walk.pages_begun < old->facts->pages || walk.more)) {
        if ((status = walk_next(&walk, old->store)))
            break;
        if (!bit(old->gone, walk.page)) {
            bool linked = false;
            for (uint64_t index = 0; index < walk.current->count; index++) {
                uint64_t source = walk.current->sources[index];
                bool stays = old->locals[source] != UINT64_MAX;
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
    return !bit(old->gone, page) &&
           (bit(old->linked, page) || (windrow_store_page_crawled(old->store, page) && !bit(old->replaced, page)));
}

static enum windrow_status write_keys(struct old *old, const char *path, struct windrow_old_counts *counts)
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
            old->locals[number] = counts->pages;
        size_t shared = windrow_keyrun_shared(before.data, before.bytes, key, key_bytes, 0);
        status = windrow_keyrun_put(&run, key, key_bytes, shared, core && !replaced ? old->degrees[number] : 0,
                                    !replaced && windrow_store_page_crawled(old->store, page));
        before.bytes = 0;
        if (!status)
            status = windrow_buffer_append(&before, key, key_bytes);
        counts->pages++;
    }
    if (!status)
        status = windrow_keyrun_writer_finish(&run);
    windrow_keyrun_writer_abandon(&run);
    windrow_buffer_free(&before);
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
        bool stays = survives(old, walk.page);
        for (uint64_t index = 0; !status && stays && !bit(old->gone, walk.page) && index < walk.current->count; index++) {
            uint64_t source = old->locals[walk.current->sources[index]];
            if (source == UINT64_MAX)
                continue;
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

enum windrow_status windrow_old_write(const struct windrow_store *store, const char *scratch, uint64_t run, windrow_old_dropped dropped,
                                      const void *context, uint64_t memory_bytes, struct windrow_meter *meter, struct windrow_old_counts *counts)
{
    struct old old = {.store = store, .facts = windrow_store_facts(store), .meter = meter};
    uint64_t words = old.facts->pages / 64 + 1, cores = old.facts->core_pages;
    uint64_t needed = 3 * words * 8 + cores * 12 + (UINT64_C(4) << 20);
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
    for (uint64_t fetched = 0; !status && fetched < run; fetched++) {
        char *path = windrow_path(scratch, "batch-%06llu.keys", (unsigned long long)fetched);
        status = path ? mark_fetched(&old, path) : memory();
        free(path);
    }
    if (!status && dropped)
        status = mark_dropped(&old, dropped, context);
    for (uint64_t core = 0; !status && core < cores; core++)
        if (bit(old.replaced, windrow_store_core_page(store, core)))
            old.locals[core] = UINT64_MAX;
    if (!status)
        status = count_links(&old);
    if (!status)
        status = write_keys(&old, key_path, counts);
    if (!status)
        status = write_links(&old, link_path, counts);
    windrow_page_reader_destroy(old.pages);
    free(old.replaced);
    free(old.gone);
    free(old.linked);
    free(old.degrees);
    free(old.locals);
    free(key_path);
    free(link_path);
    return status;
}
