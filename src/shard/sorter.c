#include "shard/sorter.h"

#include "shard/sort.h"

#include <stdlib.h>
#include <string.h>

/* In memory a record stands at a multiple of 8 bytes: key bytes (4), value bytes (4), key, value. Its place / 8 is its
 * name in the sort. */
#define READER_BYTES (512u << 10) /* a decompressor, a frame and a compressed frame */
#define FAN_IN_MOST 256

struct run {
    uint64_t number;
    unsigned level;
};

struct windrow_sorter {
    const char *scratch;
    char *name;
    uint64_t memory_bytes;
    uint8_t *arena;
    size_t arena_bytes, arena_capacity;
    struct windrow_sort_item *items;
    size_t item_count, item_at;
    bool emptying;

    struct run *runs;           /* levels never rise from front to back */
    size_t run_count, run_capacity;
    uint64_t next_run;

    struct windrow_records_reader *readers;
    size_t *heap;               /* readers that have not ended, the first record's in front */
    size_t reader_count, heap_count;
    bool stepped;               /* the front reader's record has been handed out */
};

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory while sorting; try a smaller --memory");
}

enum windrow_status windrow_sorter_create(const char *scratch, const char *name, uint64_t memory_bytes, struct windrow_sorter **out)
{
    *out = NULL;
    struct windrow_sorter *sorter = calloc(1, sizeof *sorter);
    if (!sorter)
        return memory();
    sorter->scratch = scratch;
    sorter->memory_bytes = memory_bytes;
    if (!(sorter->name = strdup(name))) {
        free(sorter);
        return memory();
    }
    *out = sorter;
    return WINDROW_OK;
}

static char *run_path(const struct windrow_sorter *sorter, uint64_t number)
{
    return windrow_path(sorter->scratch, "%s-%06llu.sort", sorter->name, (unsigned long long)number);
}

static void remove_run(struct windrow_sorter *sorter, uint64_t number)
{
    char *path = run_path(sorter, number);
    if (path)
        windrow_file_remove(path);
    free(path);
}

static void close_readers(struct windrow_sorter *sorter)
{
    for (size_t index = 0; index < sorter->reader_count; index++)
        windrow_records_reader_close(&sorter->readers[index]);
    free(sorter->readers);
    free(sorter->heap);
    sorter->readers = NULL;
    sorter->heap = NULL;
    sorter->reader_count = sorter->heap_count = 0;
}

void windrow_sorter_destroy(struct windrow_sorter *sorter)
{
    if (!sorter)
        return;
    close_readers(sorter);
    for (size_t index = 0; index < sorter->run_count; index++)
        remove_run(sorter, sorter->runs[index].number);
    free(sorter->runs);
    free(sorter->arena);
    free(sorter->items);
    free(sorter->name);
    free(sorter);
}

/* ---- In memory ---- */

static struct windrow_record stored(const struct windrow_sorter *sorter, uint32_t place)
{
    const uint8_t *at = sorter->arena + (size_t)place * 8;
    uint32_t bytes[2];
    memcpy(bytes, at, sizeof bytes);
    return (struct windrow_record){at + 8, bytes[0], at + 8 + bytes[0], bytes[1]};
}

static const uint8_t *stored_key(const void *context, uint32_t place)
{
    return stored(context, place).key;
}

static const uint8_t *stored_value(const void *context, uint32_t place)
{
    return stored(context, place).value;
}

static enum windrow_status sort_arena(struct windrow_sorter *sorter)
{
    struct windrow_sort_item *items = sorter->items = malloc((sorter->item_count + 1) * sizeof *items);
    if (!items)
        return memory();
    size_t count = 0;
    for (size_t at = 0; at < sorter->arena_bytes;) {
        struct windrow_record record = stored(sorter, (uint32_t)(at / 8));
        items[count++] = (struct windrow_sort_item){0, (uint32_t)(at / 8), (uint32_t)record.key_bytes};
        at += (8 + record.key_bytes + record.value_bytes + 7) & ~(size_t)7;
    }
    windrow_sort_keys(items, count, stored_key, sorter);
    /* Where keys are equal, by value. */
    for (size_t begin = 0, end; begin < count; begin = end) {
        struct windrow_record first = stored(sorter, items[begin].reference);
        for (end = begin + 1; end < count; end++) {
            struct windrow_record other = stored(sorter, items[end].reference);
            if (other.key_bytes != first.key_bytes || memcmp(other.key, first.key, first.key_bytes) != 0)
                break;
        }
        if (end - begin < 2)
            continue;
        for (size_t index = begin; index < end; index++)
            items[index].key_bytes = (uint32_t)stored(sorter, items[index].reference).value_bytes;
        windrow_sort_keys(items + begin, end - begin, stored_value, sorter);
    }
    return WINDROW_OK;
}

/* ---- Merging ---- */

static bool heap_before(const struct windrow_sorter *sorter, size_t a, size_t b)
{
    int order = windrow_record_compare(&sorter->readers[a].record, &sorter->readers[b].record);
    return order ? order < 0 : a < b;
}

static void heap_sink(struct windrow_sorter *sorter, size_t at)
{
    size_t *heap = sorter->heap;
    for (;;) {
        size_t first = at;
        for (size_t child = 2 * at + 1; child <= 2 * at + 2 && child < sorter->heap_count; child++)
            if (heap_before(sorter, heap[child], heap[first]))
                first = child;
        if (first == at)
            return;
        size_t kept = heap[at];
        heap[at] = heap[first];
        heap[first] = kept;
        at = first;
    }
}

static enum windrow_status open_readers(struct windrow_sorter *sorter, const struct run *runs, size_t count)
{
    sorter->readers = calloc(count + 1, sizeof *sorter->readers);
    sorter->heap = calloc(count + 1, sizeof *sorter->heap);
    if (!sorter->readers || !sorter->heap)
        return memory();
    for (size_t index = 0; index < count; index++) {
        char *path = run_path(sorter, runs[index].number);
        sorter->reader_count = index + 1;
        enum windrow_status status = path ? windrow_records_reader_open(&sorter->readers[index], path) : memory();
        free(path);
        if (status || (status = windrow_records_next(&sorter->readers[index])))
            return status;
        if (!sorter->readers[index].ended)
            sorter->heap[sorter->heap_count++] = index;
    }
    for (size_t at = sorter->heap_count; at-- > 0;)
        heap_sink(sorter, at);
    sorter->stepped = false;
    return WINDROW_OK;
}

static enum windrow_status merge_next(struct windrow_sorter *sorter, struct windrow_record *record, bool *ended)
{
    if (sorter->stepped && sorter->heap_count) {
        struct windrow_records_reader *front = &sorter->readers[sorter->heap[0]];
        enum windrow_status status = windrow_records_next(front);
        if (status)
            return status;
        if (front->ended)
            sorter->heap[0] = sorter->heap[--sorter->heap_count];
        heap_sink(sorter, 0);
    }
    sorter->stepped = true;
    *ended = sorter->heap_count == 0;
    if (!*ended)
        *record = sorter->readers[sorter->heap[0]].record;
    return WINDROW_OK;
}

static size_t fan_in(const struct windrow_sorter *sorter)
{
    uint64_t fitting = sorter->memory_bytes / READER_BYTES;
    return fitting < 2 ? 2 : fitting > FAN_IN_MOST ? FAN_IN_MOST : (size_t)fitting;
}

static enum windrow_status add_run(struct windrow_sorter *sorter, uint64_t number, unsigned level)
{
    if (sorter->run_count == sorter->run_capacity) {
        size_t capacity = 2 * sorter->run_capacity + 16;
        struct run *runs = realloc(sorter->runs, capacity * sizeof *runs);
        if (!runs)
            return memory();
        sorter->runs = runs;
        sorter->run_capacity = capacity;
    }
    sorter->runs[sorter->run_count++] = (struct run){number, level};
    return WINDROW_OK;
}

/* Merges the last `count` runs into one of a level above theirs. */
static enum windrow_status merge_last(struct windrow_sorter *sorter, size_t count)
{
    size_t first = sorter->run_count - count;
    uint64_t number = sorter->next_run++;
    struct windrow_records_writer out = {.frames.writer.descriptor = -1};
    struct windrow_record record;
    bool ended = false;
    enum windrow_status status = open_readers(sorter, sorter->runs + first, count);
    char *path = run_path(sorter, number);
    if (!status)
        status = path ? windrow_records_writer_open(&out, path) : memory();
    while (!status && !(status = merge_next(sorter, &record, &ended)) && !ended)
        status = windrow_records_put(&out, &record);
    if (!status)
        status = windrow_records_writer_finish(&out, false);
    windrow_records_writer_abandon(&out);
    free(path);
    close_readers(sorter);
    if (status)
        return status;
    for (size_t index = first; index < sorter->run_count; index++)
        remove_run(sorter, sorter->runs[index].number);
    sorter->run_count = first;
    return add_run(sorter, number, sorter->runs[first].level + 1);
}

/* Writes what is in memory as a run. */
static enum windrow_status spill(struct windrow_sorter *sorter)
{
    struct windrow_records_writer out = {.frames.writer.descriptor = -1};
    uint64_t number = sorter->next_run++;
    enum windrow_status status = sort_arena(sorter);
    char *path = run_path(sorter, number);
    if (!status)
        status = path ? windrow_records_writer_open(&out, path) : memory();
    for (size_t index = 0; !status && index < sorter->item_count; index++) {
        struct windrow_record record = stored(sorter, sorter->items[index].reference);
        status = windrow_records_put(&out, &record);
    }
    if (!status)
        status = windrow_records_writer_finish(&out, false);
    windrow_records_writer_abandon(&out);
    free(path);
    free(sorter->items);
    sorter->items = NULL;
    sorter->item_count = sorter->arena_bytes = 0;
    if (status || (status = add_run(sorter, number, 0)))
        return status;
    /* The readers of a merge take the memory's place. */
    size_t most = fan_in(sorter);
    while (!status && sorter->run_count >= most && sorter->runs[sorter->run_count - most].level == sorter->runs[sorter->run_count - 1].level) {
        free(sorter->arena);
        sorter->arena = NULL;
        sorter->arena_capacity = 0;
        status = merge_last(sorter, most);
    }
    return status;
}

enum windrow_status windrow_sorter_put(struct windrow_sorter *sorter, const struct windrow_record *record)
{
    enum windrow_status status;
    size_t bytes = (8 + record->key_bytes + record->value_bytes + 7) & ~(size_t)7;
    bool full = sorter->arena_bytes + bytes + (sorter->item_count + 1) * sizeof *sorter->items > sorter->memory_bytes ||
                (sorter->arena_bytes + bytes) / 8 >= UINT32_MAX;
    if (full && sorter->item_count && (status = spill(sorter)))
        return status;
    if (sorter->arena_bytes + bytes > sorter->arena_capacity) {
        size_t capacity = sorter->arena_capacity + sorter->arena_capacity / 4 + 4096;
        if (capacity < sorter->arena_bytes + bytes)
            capacity = sorter->arena_bytes + bytes;
        /* Large blocks move by remapping, without a copy beside them. */
        uint8_t *arena = realloc(sorter->arena, capacity);
        if (!arena)
            return memory();
        sorter->arena = arena;
        sorter->arena_capacity = capacity;
    }
    uint8_t *at = sorter->arena + sorter->arena_bytes;
    uint32_t lengths[2] = {(uint32_t)record->key_bytes, (uint32_t)record->value_bytes};
    memcpy(at, lengths, 8);
    if (record->key_bytes)
        memcpy(at + 8, record->key, record->key_bytes);
    if (record->value_bytes)
        memcpy(at + 8 + record->key_bytes, record->value, record->value_bytes);
    sorter->arena_bytes += bytes;
    sorter->item_count++;
    return WINDROW_OK;
}

/* Ends the filling: all in memory, or few enough runs to be read at once. */
static enum windrow_status begin_emptying(struct windrow_sorter *sorter)
{
    enum windrow_status status = WINDROW_OK;
    sorter->emptying = true;
    if (!sorter->run_count)
        return sort_arena(sorter);
    if (sorter->item_count && (status = spill(sorter)))
        return status;
    free(sorter->arena);
    sorter->arena = NULL;
    sorter->arena_capacity = 0;
    size_t most = fan_in(sorter);
    while (!status && sorter->run_count > most) {
        size_t surplus = sorter->run_count - most + 1;
        status = merge_last(sorter, surplus < most ? surplus : most);
    }
    return status ? status : open_readers(sorter, sorter->runs, sorter->run_count);
}

enum windrow_status windrow_sorter_next(struct windrow_sorter *sorter, struct windrow_record *record, bool *ended)
{
    enum windrow_status status;
    if (!sorter->emptying && (status = begin_emptying(sorter)))
        return status;
    if (sorter->run_count)
        return merge_next(sorter, record, ended);
    *ended = sorter->item_at == sorter->item_count;
    if (!*ended)
        *record = stored(sorter, sorter->items[sorter->item_at++].reference);
    return WINDROW_OK;
}
