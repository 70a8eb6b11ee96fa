#include "shard/batch.h"

#include "shard/keyrun.h"
#include "shard/linkrun.h"
#include "shard/sort.h"

#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <xxhash.h>

/* What a batch keeps in memory:
 *
 *   arena    records of keys, each at a multiple of 8 bytes: local id (4), key bytes (4), the key
 *   places   local id -> arena place / 8
 *   slots    hash table: upper half of the hash, arena place / 8 + 1 (0: free)
 *   lines    source, number of targets, targets … as local ids
 *   origins  of each page where it was seen first; only once there are ids, whose names may turn out to be missing
 *
 * and while it is written, per page a sort item (16), its new id (4), its out-degree (4) and where its
 * in-links begin (4); per line a start (8); per link its source (4). */
struct slot {
    uint32_t tag;
    uint32_t place;
};

struct origin {
    uint64_t line;
    uint32_t file;
    uint32_t source_fields; /* times that it stood as a source */
};

#define WAITING 64 /* targets looked up together, so that their cache misses overlap */

/* Most targets were met a moment ago (navigation links, neighbours): a table small enough for the processor's cache
 * remembers where, and spares them the large one. */
#define RECENT 8192

#define SLOTS_FIRST ((size_t)1 << 16)

struct windrow_batch {
    uint64_t memory_bytes;
    const struct windrow_fold *fold;
    bool with_ids;
    size_t id_count;
    uint64_t file, line;       /* of what is being added */
    struct origin *origins;
    size_t origin_capacity;
    uint8_t *arena;
    size_t arena_bytes, arena_capacity;
    uint32_t *places;
    uint8_t *crawled;          /* a byte a page */
    size_t page_count, page_capacity;
    struct slot *slots;
    size_t slot_count;         /* a power of two */
    size_t slots_planned;      /* more only for a single line that holds very many pages */
    size_t page_limit;         /* the slots' fill limit */
    uint32_t *lines;
    size_t line_words, line_capacity;
    size_t line_count;
    size_t link_count;

    size_t open_line;          /* index in lines of the current source; SIZE_MAX: none */
    struct slot *recent;       /* RECENT of them; place 0: free */
    struct windrow_buffer waiting_keys;
    uint64_t waiting_hash[WAITING];
    uint32_t waiting_at[WAITING], waiting_bytes[WAITING];
    uint32_t waiting_id[WAITING]; /* FROM_TABLE: still to be looked up */
    size_t waiting;
};

#define FROM_TABLE UINT32_MAX

static const uint8_t *record_key(const struct windrow_batch *batch, uint32_t place)
{
    return batch->arena + (size_t)place * 8 + 8;
}

static uint32_t record_word(const struct windrow_batch *batch, uint32_t place, unsigned word)
{
    uint32_t value;
    memcpy(&value, batch->arena + (size_t)place * 8 + 4 * word, 4);
    return value;
}

static bool record_is(const struct windrow_batch *batch, uint32_t place, const char *key, size_t key_bytes)
{
    return record_word(batch, place, 1) == key_bytes && memcmp(record_key(batch, place), key, key_bytes) == 0;
}

static uint64_t least(uint64_t a, uint64_t b)
{
    return a < b ? a : b;
}

#define PAGE_BYTES (4 + 1 + 16 + 4 + 4 + 4)

/* Pages that folding may add at most. */
static uint64_t pages_to_come(const struct windrow_batch *batch)
{
    uint64_t named = least(batch->id_count, batch->fold ? batch->fold->names.count : 0);
    return named + least(batch->page_count + named, batch->fold ? batch->fold->aliases.count : 0);
}

/* Memory that folding may add: keys are taken to be half as long again as they are on average, at most. */
static uint64_t memory_to_come(const struct windrow_batch *batch)
{
    const struct windrow_fold *fold = batch->fold;
    if (!fold)
        return 0;
    uint64_t named = least(batch->id_count, fold->names.count), named_bytes = named ? fold->names.key_bytes / fold->names.count * named * 3 / 2 : 0;
    uint64_t folded = least(batch->page_count + named, fold->aliases.count);
    uint64_t folded_bytes = least(fold->aliases.to_bytes, (batch->arena_bytes + named_bytes) * 3 / 2);
    return (named + folded) * (PAGE_BYTES + 16) + named_bytes + folded_bytes + (batch->with_ids ? batch->page_count * sizeof(struct origin) : 0);
}

/* Bytes that filling and writing take with the current contents. */
static uint64_t memory_in_use(const struct windrow_batch *batch)
{
    return batch->arena_bytes + batch->slot_count * sizeof(struct slot) + (uint64_t)batch->page_count * PAGE_BYTES +
           (uint64_t)batch->line_words * 4 + (uint64_t)batch->link_count * 4 + (uint64_t)batch->line_count * 8 + memory_to_come(batch);
}

/* An empty hash table. It is looked into at random, so it asks for large pages: fewer address translations miss. */
static struct slot *table(size_t count)
{
    size_t bytes = count * sizeof(struct slot), large = (size_t)2 << 20;
    struct slot *slots = bytes >= large ? aligned_alloc(large, bytes) : malloc(bytes);
    if (!slots)
        return NULL;
    if (bytes >= large)
        madvise(slots, bytes, MADV_HUGEPAGE);
    memset(slots, 0, bytes);
    return slots;
}

enum windrow_status windrow_batch_create(uint64_t memory_bytes, const struct windrow_fold *fold, struct windrow_batch **out)
{
    *out = NULL;
    struct windrow_batch *batch = calloc(1, sizeof *batch);
    if (!batch)
        return windrow_fail(WINDROW_RESOURCE, "out of memory for a batch");
    batch->memory_bytes = memory_bytes;
    batch->fold = windrow_fold_needed(fold) ? fold : NULL;
    batch->open_line = SIZE_MAX;
    /* A page takes some 200 bytes with its links and sorting: slots for twice as many, in the end. A small crawl
     * never gets there. */
    batch->slots_planned = 1024;
    while (batch->slots_planned * 160 < memory_bytes && batch->slots_planned < ((size_t)1 << 31))
        batch->slots_planned *= 2;
    batch->slot_count = batch->slots_planned < SLOTS_FIRST ? batch->slots_planned : SLOTS_FIRST;
    batch->page_limit = batch->slot_count / 4 * 3;
    batch->slots = table(batch->slot_count);
    batch->recent = calloc(RECENT, sizeof *batch->recent);
    if (!batch->slots || !batch->recent) {
        windrow_batch_destroy(batch);
        return windrow_fail(WINDROW_RESOURCE, "out of memory for a batch of %llu bytes; try a smaller --memory", (unsigned long long)memory_bytes);
    }
    *out = batch;
    return WINDROW_OK;
}

void windrow_batch_destroy(struct windrow_batch *batch)
{
    if (!batch)
        return;
    free(batch->arena);
    free(batch->places);
    free(batch->crawled);
    free(batch->origins);
    free(batch->slots);
    free(batch->recent);
    free(batch->lines);
    windrow_buffer_free(&batch->waiting_keys);
    free(batch);
}

bool windrow_batch_full(const struct windrow_batch *batch)
{
    return memory_in_use(batch) >= batch->memory_bytes ||
           batch->page_count + pages_to_come(batch) >= batch->slots_planned / 4 * 3 - batch->slots_planned / 16;
}

bool windrow_batch_empty(const struct windrow_batch *batch)
{
    return batch->page_count == 0;
}

static enum windrow_status grow(void *array, size_t *capacity, size_t wanted, size_t item_bytes)
{
    if (wanted <= *capacity)
        return WINDROW_OK;
    size_t larger = *capacity + *capacity / 4 + 4096;
    if (larger < wanted)
        larger = wanted;
    /* Large blocks move by remapping, without a copy beside them. */
    void *moved = realloc(*(void **)array, larger * item_bytes);
    if (!moved)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while filling a batch; try a smaller --memory");
    *(void **)array = moved;
    *capacity = larger;
    return WINDROW_OK;
}

static enum windrow_status rehash(struct windrow_batch *batch)
{
    size_t count = batch->slot_count * 2;
    struct slot *slots = table(count);
    if (!slots)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while filling a batch; try a smaller --memory");
    for (size_t page = 0; page < batch->page_count; page++) {
        uint32_t place = batch->places[page];
        uint64_t hash = XXH3_64bits(record_key(batch, place), record_word(batch, place, 1));
        size_t at = hash & (count - 1);
        while (slots[at].place)
            at = (at + 1) & (count - 1);
        slots[at] = (struct slot){(uint32_t)(hash >> 32), place + 1};
    }
    free(batch->slots);
    batch->slots = slots;
    batch->slot_count = count;
    batch->page_limit = count / 4 * 3;
    return WINDROW_OK;
}

/* Keeps where a page was seen first: from the first id on, for all that come. */
static enum windrow_status note_origin(struct windrow_batch *batch, bool id)
{
    if (!batch->with_ids && !id)
        return WINDROW_OK;
    enum windrow_status status = grow(&batch->origins, &batch->origin_capacity, batch->page_count + 1, sizeof *batch->origins);
    if (status)
        return status;
    batch->origins[batch->page_count] = (struct origin){batch->line, (uint32_t)batch->file, 0};
    batch->with_ids = true;
    batch->id_count += id;
    return WINDROW_OK;
}

static enum windrow_status find_or_add(struct windrow_batch *batch, const char *key, size_t key_bytes, uint64_t hash, uint32_t *id)
{
    uint32_t tag = (uint32_t)(hash >> 32);
    size_t at = hash & (batch->slot_count - 1);
    for (; batch->slots[at].place; at = (at + 1) & (batch->slot_count - 1)) {
        if (batch->slots[at].tag != tag)
            continue;
        uint32_t place = batch->slots[at].place - 1;
        if (record_word(batch, place, 1) == key_bytes && memcmp(record_key(batch, place), key, key_bytes) == 0) {
            *id = record_word(batch, place, 0);
            return WINDROW_OK;
        }
    }
    enum windrow_status status;
    if (batch->page_count >= batch->page_limit) {
        if ((status = rehash(batch)))
            return status;
        return find_or_add(batch, key, key_bytes, hash, id);
    }
    size_t record_bytes = (8 + key_bytes + 7) & ~(size_t)7;
    if ((batch->arena_bytes + record_bytes) / 8 >= UINT32_MAX - 1)
        return windrow_fail(WINDROW_RESOURCE, "a batch outgrew 32 GiB of URLs; try a smaller --memory");
    if ((status = grow(&batch->arena, &batch->arena_capacity, batch->arena_bytes + record_bytes, 1)))
        return status;
    size_t capacity = batch->page_capacity;
    if ((status = grow(&batch->places, &capacity, batch->page_count + 1, sizeof *batch->places)))
        return status;
    if ((status = grow(&batch->crawled, &batch->page_capacity, batch->page_count + 1, 1)) || (status = note_origin(batch, windrow_names_is_id(key))))
        return status;
    uint32_t place = (uint32_t)(batch->arena_bytes / 8), words[2] = {(uint32_t)batch->page_count, (uint32_t)key_bytes};
    memcpy(batch->arena + batch->arena_bytes, words, 8);
    memcpy(batch->arena + batch->arena_bytes + 8, key, key_bytes);
    batch->arena_bytes += record_bytes;
    batch->places[batch->page_count] = place;
    batch->crawled[batch->page_count] = 0;
    batch->slots[at] = (struct slot){tag, place + 1};
    *id = (uint32_t)batch->page_count++;
    return WINDROW_OK;
}

void windrow_batch_place(struct windrow_batch *batch, uint64_t file, uint64_t line)
{
    batch->file = file;
    batch->line = line;
}

enum windrow_status windrow_batch_source(struct windrow_batch *batch, const char *key, size_t key_bytes)
{
    if (batch->open_line != SIZE_MAX) {
        /* The same source as on the line before: its links simply go on. */
        if (record_is(batch, batch->places[batch->lines[batch->open_line]], key, key_bytes)) {
            if (windrow_names_is_id(key))
                batch->origins[batch->lines[batch->open_line]].source_fields++;
            return WINDROW_OK;
        }
    }
    uint32_t id;
    enum windrow_status status = find_or_add(batch, key, key_bytes, XXH3_64bits(key, key_bytes), &id);
    if (!status)
        status = grow(&batch->lines, &batch->line_capacity, batch->line_words + 2, sizeof *batch->lines);
    if (status)
        return status;
    if (windrow_names_is_id(key))
        batch->origins[id].source_fields++;
    batch->crawled[id] = 1;
    batch->open_line = batch->line_words;
    batch->lines[batch->line_words++] = id;
    batch->lines[batch->line_words++] = 0;
    batch->line_count++;
    return WINDROW_OK;
}

static enum windrow_status look_up_waiting(struct windrow_batch *batch)
{
    enum windrow_status status = grow(&batch->lines, &batch->line_capacity, batch->line_words + batch->waiting, sizeof *batch->lines);
    if (status)
        return status;
    for (size_t index = 0; index < batch->waiting; index++) {
        if (batch->waiting_id[index] != FROM_TABLE)
            continue;
        const struct slot *slot = &batch->slots[batch->waiting_hash[index] & (batch->slot_count - 1)];
        if (slot->place)
            __builtin_prefetch(batch->arena + (size_t)(slot->place - 1) * 8);
    }
    for (size_t index = 0; index < batch->waiting; index++) {
        uint32_t id = batch->waiting_id[index];
        if (id == FROM_TABLE) {
            uint64_t hash = batch->waiting_hash[index];
            status = find_or_add(batch, (const char *)batch->waiting_keys.data + batch->waiting_at[index], batch->waiting_bytes[index], hash, &id);
            if (status)
                return status;
            batch->recent[hash % RECENT] = (struct slot){(uint32_t)(hash >> 32), batch->places[id] + 1};
        }
        batch->lines[batch->line_words++] = id;
    }
    batch->lines[batch->open_line + 1] += (uint32_t)batch->waiting;
    batch->link_count += batch->waiting;
    batch->waiting = 0;
    batch->waiting_keys.bytes = 0;
    return WINDROW_OK;
}

enum windrow_status windrow_batch_target(struct windrow_batch *batch, const char *key, size_t key_bytes, bool *self)
{
    *self = record_is(batch, batch->places[batch->lines[batch->open_line]], key, key_bytes) && !windrow_names_is_id(key);
    if (*self)
        return WINDROW_OK;
    uint64_t hash = XXH3_64bits(key, key_bytes);
    size_t index = batch->waiting++;
    const struct slot *recent = &batch->recent[hash % RECENT];
    if (recent->place && recent->tag == (uint32_t)(hash >> 32) && record_is(batch, recent->place - 1, key, key_bytes)) {
        batch->waiting_id[index] = record_word(batch, recent->place - 1, 0);
    } else {
        __builtin_prefetch(&batch->slots[hash & (batch->slot_count - 1)]);
        batch->waiting_id[index] = FROM_TABLE;
        batch->waiting_hash[index] = hash;
        batch->waiting_at[index] = (uint32_t)batch->waiting_keys.bytes;
        batch->waiting_bytes[index] = (uint32_t)key_bytes;
        enum windrow_status status = windrow_buffer_append(&batch->waiting_keys, key, key_bytes);
        if (status)
            return status;
    }
    return batch->waiting == WAITING ? look_up_waiting(batch) : WINDROW_OK;
}

enum windrow_status windrow_batch_line_end(struct windrow_batch *batch)
{
    return batch->waiting ? look_up_waiting(batch) : WINDROW_OK;
}

/* ---- Folding ---- */

static size_t fold_count(const void *context)
{
    return ((const struct windrow_batch *)context)->page_count;
}

static const uint8_t *fold_key(const void *context, uint32_t page, uint32_t *key_bytes)
{
    const struct windrow_batch *batch = context;
    *key_bytes = record_word(batch, batch->places[page], 1);
    return record_key(batch, batch->places[page]);
}

static enum windrow_status fold_add(void *context, const uint8_t *key, size_t key_bytes, uint32_t *page)
{
    return find_or_add(context, (const char *)key, key_bytes, XXH3_64bits(key, key_bytes), page);
}

/* Counts and tells the ids without a name: as fields that are sources here, as those that are targets with their links. */
static enum windrow_status tell_unnamed(const struct windrow_batch *batch, const uint32_t *places, windrow_fold_unnamed unnamed, void *context,
                                        struct windrow_batch_counts *counts)
{
    enum windrow_status status = WINDROW_OK;
    for (size_t page = 0; !status && batch->with_ids && page < batch->page_count; page++) {
        const char *key = (const char *)record_key(batch, batch->places[page]);
        if (places[page] != WINDROW_FOLD_DROPPED(WINDROW_DROP_MALFORMED) || !windrow_names_is_id(key))
            continue;
        counts->bad_fields += batch->origins[page].source_fields;
        if (unnamed)
            status = unnamed(context, batch->origins[page].file, batch->origins[page].line, windrow_names_id(key));
    }
    return status;
}

/* Renumbers the lines to the pages that take their pages' places, and leaves out lines and links that have none. A
 * link is dropped for the first reason that fits its source or its target. present[page]: some line still speaks of it. */
static void fold_lines(struct windrow_batch *batch, const uint32_t *places, uint8_t *present, struct windrow_batch_counts *counts)
{
    size_t out = 0, next;
    batch->line_count = batch->link_count = 0;
    for (size_t at = 0; at < batch->line_words; at = next) {
        uint32_t source = places[batch->lines[at]], count = batch->lines[at + 1], kept = 0;
        uint32_t *to = batch->lines + out;
        next = at + 2 + count;
        for (uint32_t index = 0; index < count; index++) {
            uint32_t target = places[batch->lines[at + 2 + index]];
            counts->bad_fields += target == WINDROW_FOLD_DROPPED(WINDROW_DROP_MALFORMED);
            /* Reasons are the larger the earlier they are tried, and larger than any page. */
            uint32_t first = source > target ? source : target;
            if (windrow_fold_is_dropped(first)) {
                counts->dropped[windrow_fold_reason(first)]++;
            } else if (source == target) {
                counts->dropped[WINDROW_DROP_SELF]++;
            } else {
                to[2 + kept++] = target;
                present[target] = 1;
            }
        }
        if (windrow_fold_is_dropped(source))
            continue;
        to[0] = source;
        to[1] = kept;
        present[source] = batch->crawled[source] = 1;
        out += 2 + kept;
        batch->line_count++;
        batch->link_count += kept;
    }
    batch->line_words = out;
}

/* Brings the batch's pages to what they stand for; *present is the caller's, NULL when nothing was to be done. */
static enum windrow_status fold(struct windrow_batch *batch, windrow_fold_unnamed unnamed, void *context, uint8_t **present,
                                struct windrow_batch_counts *counts)
{
    *present = NULL;
    uint32_t *places = NULL;
    const struct windrow_fold_pages pages = {batch, fold_count, fold_key, fold_add};
    if (!batch->fold)
        return WINDROW_OK;
    enum windrow_status status = windrow_fold_run(batch->fold, &pages, &places);
    if (!status)
        status = tell_unnamed(batch, places, unnamed, context, counts);
    if (!status && !(*present = calloc(batch->page_count + 1, 1)))
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while folding a batch; try a smaller --memory");
    if (!status)
        fold_lines(batch, places, *present, counts);
    free(places);
    return status;
}

/* ---- Writing ---- */

static const uint8_t *sort_key(const void *context, uint32_t reference)
{
    const struct windrow_batch *batch = context;
    return record_key(batch, batch->places[reference]);
}

/* Sorts the keys of the pages that are there (NULL: all): order[new id].reference = local id, renumbered[local id] = new id.
 * Returns how many they are. */
static size_t sort_pages(const struct windrow_batch *batch, const uint8_t *present, struct windrow_sort_item *order, uint32_t *renumbered)
{
    size_t count = 0;
    for (size_t page = 0; page < batch->page_count; page++)
        if (!present || present[page])
            order[count++] = (struct windrow_sort_item){0, (uint32_t)page, record_word(batch, batch->places[page], 1)};
    windrow_sort_keys(order, count, sort_key, batch);
    for (size_t page = 0; page < count; page++)
        renumbered[order[page].reference] = (uint32_t)page;
    return count;
}

/* Puts the sources of all links into `sources`, by target and, within a target, ascending: a counting sort
 * of the lines by source, then a stable one of the links by target. ends[t] becomes the end of t's list. */
static enum windrow_status sort_links(struct windrow_batch *batch, size_t pages, const uint32_t *renumbered, uint32_t *ends, uint32_t *sources)
{
    uint32_t *line_ends = calloc(pages + 1, sizeof *line_ends);
    size_t *starts = malloc((batch->line_count + 1) * sizeof *starts);
    enum windrow_status status = WINDROW_OK;
    if (!line_ends || !starts) {
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while sorting a batch; try a smaller --memory");
        goto out;
    }
    /* The lines are renumbered in place, so that no page has to be looked up twice. */
    for (size_t at = 0; at < batch->line_words; at += 2 + batch->lines[at + 1]) {
        uint32_t *line = batch->lines + at, count = line[1];
        line[0] = renumbered[line[0]];
        line_ends[line[0] + 1]++;
        for (uint32_t *target = line + 2; target < line + 2 + count; target++) {
            *target = renumbered[*target];
            ends[*target + 1]++;
        }
    }
    for (size_t page = 0; page < pages; page++) {
        line_ends[page + 1] += line_ends[page];
        ends[page + 1] += ends[page];
    }
    for (size_t at = 0; at < batch->line_words; at += 2 + batch->lines[at + 1])
        starts[line_ends[batch->lines[at]]++] = at;
    for (size_t line = 0; line < batch->line_count; line++) {
        const uint32_t *words = batch->lines + starts[line];
        if (line + 4 < batch->line_count)
            __builtin_prefetch(batch->lines + starts[line + 4]);
        uint32_t source = words[0];
        for (uint32_t index = 0; index < words[1]; index++)
            sources[ends[words[2 + index]]++] = source;
    }
out:
    free(line_ends);
    free(starts);
    return status;
}

static enum windrow_status write_links(size_t pages, const uint32_t *ends, uint32_t *sources, uint32_t *degrees, const char *path,
                                       struct windrow_batch_counts *counts)
{
    struct windrow_linkrun_writer run;
    enum windrow_status status = windrow_linkrun_writer_open(&run, path);
    if (status)
        return status;
    size_t begin = 0;
    for (size_t target = 0; target < pages; target++) {
        size_t end = ends[target], kept = 0;
        uint32_t *list = sources + begin;
        for (size_t index = begin; index < end; index++) {
            if (kept && list[kept - 1] == sources[index])
                continue;
            list[kept++] = sources[index];
            degrees[sources[index]]++;
        }
        counts->links += kept;
        counts->duplicates += end - begin - kept;
        if (kept && (status = windrow_linkrun_put_narrow(&run, target, list, kept)))
            goto out;
        begin = end;
    }
    status = windrow_linkrun_writer_finish(&run);
out:
    windrow_linkrun_writer_abandon(&run);
    return status;
}

static enum windrow_status write_keys(const struct windrow_batch *batch, size_t pages, const struct windrow_sort_item *order, const uint32_t *degrees,
                                      const char *path)
{
    struct windrow_keyrun_writer run;
    enum windrow_status status = windrow_keyrun_writer_open(&run, path);
    if (status)
        return status;
    const uint8_t *before = NULL;
    size_t before_bytes = 0;
    for (size_t page = 0; page < pages; page++) {
        if (page + 8 < pages)
            __builtin_prefetch(record_key(batch, batch->places[order[page + 8].reference]));
        uint32_t local = order[page].reference;
        const uint8_t *key = record_key(batch, batch->places[local]);
        size_t key_bytes = order[page].key_bytes;
        size_t shared = before ? windrow_keyrun_shared(before, before_bytes, key, key_bytes, 0) : 0;
        if ((status = windrow_keyrun_put(&run, key, key_bytes, shared, degrees[page], batch->crawled[local])))
            goto out;
        before = key;
        before_bytes = key_bytes;
    }
    status = windrow_keyrun_writer_finish(&run);
out:
    windrow_keyrun_writer_abandon(&run);
    return status;
}

static void empty(struct windrow_batch *batch)
{
    memset(batch->slots, 0, batch->slot_count * sizeof *batch->slots);
    memset(batch->recent, 0, RECENT * sizeof *batch->recent);
    batch->arena_bytes = 0;
    batch->page_count = batch->id_count = 0;
    batch->with_ids = false;
    batch->line_words = batch->line_count = batch->link_count = 0;
    batch->open_line = SIZE_MAX;
}

enum windrow_status windrow_batch_write(struct windrow_batch *batch, const char *key_path, const char *link_path, windrow_fold_unnamed unnamed, void *context,
                                        struct windrow_batch_counts *counts)
{
    *counts = (struct windrow_batch_counts){0};
    if (batch->link_count > UINT32_MAX)
        return windrow_fail(WINDROW_RESOURCE, "a batch outgrew 2^32 links; try a smaller --memory");
    uint8_t *present;
    struct windrow_sort_item *order = NULL;
    uint32_t *renumbered = NULL, *ends = NULL, *degrees = NULL, *sources = NULL;
    enum windrow_status status = fold(batch, unnamed, context, &present, counts);
    if (status)
        goto out;
    order = malloc((batch->page_count + 1) * sizeof *order);
    renumbered = malloc((batch->page_count + 1) * sizeof *renumbered);
    ends = calloc(batch->page_count + 1, sizeof *ends);
    degrees = calloc(batch->page_count + 1, sizeof *degrees);
    sources = malloc((batch->link_count + 1) * sizeof *sources);
    if (!order || !renumbered || !ends || !degrees || !sources) {
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while sorting a batch; try a smaller --memory");
        goto out;
    }
    counts->pages = sort_pages(batch, present, order, renumbered);
    if ((status = sort_links(batch, counts->pages, renumbered, ends, sources)))
        goto out;
    if ((status = write_links(counts->pages, ends, sources, degrees, link_path, counts)))
        goto out;
    if ((status = write_keys(batch, counts->pages, order, degrees, key_path)))
        goto out;
    empty(batch);
out:
    free(present);
    free(order);
    free(renumbered);
    free(ends);
    free(degrees);
    free(sources);
    return status;
}
