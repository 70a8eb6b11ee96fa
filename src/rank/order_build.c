/* How an order is made. The scores are read run by run; a run is what a worker's share of the memory budget can
 * sort. Runs are sorted by radix on the bits of the score (the bits of doubles that are not negative rise
 * with them) into one scratch file, each at its place, and merged through a heap. Within a run the sort is
 * stable and the pages come in id order; of equal scores in two runs the earlier run's come first. So ids
 * need not be compared at all, and the result knows nothing of the runs. */
#include "base/crew.h"
#include "rank/order_layout.h"

#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <xxhash.h>

enum {
    SECTION_BUFFER_BYTES = 128 * 1024,
    RADIX_BITS = 11,
    RADIX_SIZE = 1 << RADIX_BITS,
    RADIX_PASSES = 6,
    READ_PAGES = 8192 /* scores read at a time while sorting */
};

/* Sorted descending by key means: key is the complement of the score's bits, ascending. */
struct entry {
    uint64_t key;
    uint64_t page;
};

struct sorter {
    uint64_t pages;
    uint64_t run_pages;
    uint64_t runs;
    int scores;              /* descriptor of the vector */
    const char *scores_path;
    uint64_t scores_offset;
    int scratch;             /* descriptor of the runs; its file has no name any more */
    char *scratch_path;      /* for messages */
    struct entry **room;     /* one a worker, two runs long */
    struct windrow_meter *meter;
};

static enum windrow_status stop_asked(const struct sorter *sorter)
{
    if (sorter->meter && windrow_meter_stopping(sorter->meter))
        return windrow_fail(WINDROW_STOPPED, "stopped while sorting the pages by score; run the same command again to go on");
    return WINDROW_OK;
}

static void count_units(const struct sorter *sorter, uint64_t units)
{
    if (sorter->meter)
        windrow_meter_add(sorter->meter, units);
}

static enum windrow_status load_run(const struct sorter *sorter, uint64_t first, uint64_t count, struct entry *entries)
{
    double scores[READ_PAGES];
    for (uint64_t at = 0; at < count;) {
        uint64_t take = count - at < READ_PAGES ? count - at : READ_PAGES;
        enum windrow_status status = windrow_file_read_at(sorter->scores, sorter->scores_path, scores, take * sizeof(double),
                                                          sorter->scores_offset + (first + at) * sizeof(double));
        if (status)
            return status;
        for (uint64_t i = 0; i < take; i++) {
            double score = scores[i] + 0.0; /* a negative zero becomes a plain one */
            if (!(score >= 0) || score > 2)
                return windrow_fail(WINDROW_DAMAGED, "%s: the score of page %llu is %g, which no score can be; rank again with --fresh",
                                    sorter->scores_path, (unsigned long long)(first + at + i), score);
            uint64_t bits;
            memcpy(&bits, &score, sizeof bits);
            entries[at + i] = (struct entry){~bits, first + at + i};
        }
        at += take;
    }
    return WINDROW_OK;
}

static unsigned digit_of(uint64_t key, unsigned pass)
{
    return (unsigned)(key >> (pass * RADIX_BITS)) & (RADIX_SIZE - 1);
}

/* Sorts stably by key; the result is in the returned one of the two arrays. */
static struct entry *radix_sort(struct entry *entries, struct entry *other, uint64_t count, uint64_t (*counts)[RADIX_SIZE])
{
    memset(counts, 0, RADIX_PASSES * sizeof counts[0]);
    for (uint64_t i = 0; i < count; i++)
        for (unsigned pass = 0; pass < RADIX_PASSES; pass++)
            counts[pass][digit_of(entries[i].key, pass)]++;
    for (unsigned pass = 0; pass < RADIX_PASSES; pass++) {
        uint64_t *next = counts[pass];
        if (count && next[digit_of(entries[0].key, pass)] == count)
            continue; /* all alike here */
        uint64_t sum = 0;
        for (unsigned digit = 0; digit < RADIX_SIZE; digit++) {
            uint64_t here = next[digit];
            next[digit] = sum;
            sum += here;
        }
        for (uint64_t i = 0; i < count; i++)
            other[next[digit_of(entries[i].key, pass)]++] = entries[i];
        struct entry *swap = entries;
        entries = other;
        other = swap;
    }
    return entries;
}

static enum windrow_status sort_run(void *context, uint64_t task, unsigned worker)
{
    struct sorter *sorter = context;
    enum windrow_status status = stop_asked(sorter);
    if (status)
        return status;
    uint64_t first = task * sorter->run_pages;
    uint64_t count = sorter->pages - first < sorter->run_pages ? sorter->pages - first : sorter->run_pages;
    struct entry *entries = sorter->room[worker], *other = entries + sorter->run_pages;
    uint64_t(*counts)[RADIX_SIZE] = malloc(RADIX_PASSES * sizeof counts[0]);
    if (!counts)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while sorting the pages by score");
    if ((status = load_run(sorter, first, count, entries)))
        goto out;
    struct entry *sorted = radix_sort(entries, other, count, counts);
    if ((status = windrow_file_write_at(sorter->scratch, sorter->scratch_path, sorted, count * sizeof *sorted, first * sizeof *sorted)))
        goto out;
    count_units(sorter, count);
out:
    free(counts);
    return status;
}

/* A section of the file being written front to back. */
struct section {
    int descriptor;
    const char *path;
    uint64_t offset;
    XXH3_state_t *checksum;
    size_t used_bytes;
    uint8_t *buffer;
};

static enum windrow_status section_flush(struct section *section)
{
    XXH3_64bits_update(section->checksum, section->buffer, section->used_bytes);
    enum windrow_status status = windrow_file_write_at(section->descriptor, section->path, section->buffer, section->used_bytes, section->offset);
    section->offset += section->used_bytes;
    section->used_bytes = 0;
    return status;
}

static enum windrow_status section_append(struct section *section, const void *data, size_t bytes)
{
    if (section->used_bytes + bytes > SECTION_BUFFER_BYTES) {
        enum windrow_status status = section_flush(section);
        if (status)
            return status;
    }
    memcpy(section->buffer + section->used_bytes, data, bytes);
    section->used_bytes += bytes;
    return WINDROW_OK;
}

enum { IDS, SCORES, SAMPLES, SECTIONS };

/* A run being merged: what is in memory of it, and where the rest is. */
struct source {
    struct entry *entries;
    uint64_t at;     /* next one in memory */
    uint64_t held;   /* in memory */
    uint64_t next;   /* first entry of the scratch file that is not in memory yet */
    uint64_t end;
};

static enum windrow_status source_fill(const struct sorter *sorter, struct source *source, uint64_t capacity)
{
    uint64_t left = source->end - source->next;
    source->held = left < capacity ? left : capacity;
    source->at = 0;
    enum windrow_status status = windrow_file_read_at(sorter->scratch, sorter->scratch_path, source->entries,
                                                      source->held * sizeof *source->entries, source->next * sizeof *source->entries);
    source->next += source->held;
    return status;
}

static bool comes_before(const struct source *sources, uint64_t a, uint64_t b)
{
    uint64_t key_a = sources[a].entries[sources[a].at].key, key_b = sources[b].entries[sources[b].at].key;
    return key_a != key_b ? key_a < key_b : a < b;
}

static void sift_down(const struct source *sources, uint64_t *heap, uint64_t count, uint64_t at)
{
    uint64_t moving = heap[at];
    for (;;) {
        uint64_t child = 2 * at + 1;
        if (child >= count)
            break;
        if (child + 1 < count && comes_before(sources, heap[child + 1], heap[child]))
            child++;
        if (comes_before(sources, moving, heap[child]))
            break;
        heap[at] = heap[child];
        at = child;
    }
    heap[at] = moving;
}

static enum windrow_status put_place(struct section *sections, uint32_t id_bytes, uint64_t index, const struct entry *entry)
{
    uint64_t bits = ~entry->key;
    enum windrow_status status;
    if ((status = section_append(&sections[IDS], &entry->page, id_bytes))) /* the low bytes come first */
        return status;
    if ((status = section_append(&sections[SCORES], &bits, sizeof bits)))
        return status;
    return index % WINDROW_ORDER_STRIDE ? WINDROW_OK : section_append(&sections[SAMPLES], &bits, sizeof bits);
}

static enum windrow_status merge_runs(const struct sorter *sorter, uint64_t memory_bytes, struct section *sections, uint32_t id_bytes)
{
    enum windrow_status status = WINDROW_OK;
    uint64_t capacity = sorter->runs ? memory_bytes / sorter->runs / sizeof(struct entry) : 0;
    if (capacity > 64 * 1024)
        capacity = 64 * 1024;
    if (sorter->runs && capacity < 64)
        return windrow_fail(WINDROW_RESOURCE, "%llu pages cannot be sorted by score within %llu bytes; give more --memory",
                            (unsigned long long)sorter->pages, (unsigned long long)memory_bytes);
    struct source *sources = calloc(sorter->runs + 1, sizeof *sources);
    uint64_t *heap = calloc(sorter->runs + 1, sizeof *heap);
    struct entry *room = malloc(sorter->runs * capacity * sizeof *room + 1);
    if (!sources || !heap || !room) {
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while sorting the pages by score");
        goto out;
    }
    uint64_t count = sorter->runs;
    for (uint64_t run = 0; run < count; run++) {
        uint64_t end = (run + 1) * sorter->run_pages;
        sources[run] = (struct source){.entries = room + run * capacity, .next = run * sorter->run_pages,
                                       .end = end < sorter->pages ? end : sorter->pages};
        if ((status = source_fill(sorter, &sources[run], capacity)))
            goto out;
        heap[run] = run;
    }
    for (uint64_t at = count / 2; at-- > 0;)
        sift_down(sources, heap, count, at);
    for (uint64_t index = 0; count; index++) {
        struct source *source = &sources[heap[0]];
        if ((status = put_place(sections, id_bytes, index, &source->entries[source->at++])))
            goto out;
        if (source->at == source->held) {
            count_units(sorter, source->held);
            if ((status = stop_asked(sorter)))
                goto out;
            if (source->next == source->end)
                heap[0] = heap[--count];
            else if ((status = source_fill(sorter, source, capacity)))
                goto out;
        }
        if (count)
            sift_down(sources, heap, count, 0);
    }
out:
    free(sources);
    free(heap);
    free(room);
    return status;
}

static enum windrow_status sort_runs(struct sorter *sorter, uint64_t memory_bytes, unsigned threads)
{
    enum windrow_status status = WINDROW_OK;
    struct windrow_crew *crew = NULL;
    uint64_t share = (sorter->pages + threads - 1) / threads;
    sorter->run_pages = memory_bytes / threads / (2 * sizeof(struct entry));
    if (sorter->run_pages > share)
        sorter->run_pages = share;
    sorter->runs = sorter->pages ? (sorter->pages + sorter->run_pages - 1) / sorter->run_pages : 0;
    sorter->room = calloc(threads, sizeof *sorter->room);
    if (!sorter->room)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while sorting the pages by score");
    for (unsigned worker = 0; worker < threads && sorter->runs; worker++) {
        sorter->room[worker] = malloc(2 * sorter->run_pages * sizeof(struct entry));
        if (!sorter->room[worker]) {
            status = windrow_fail(WINDROW_RESOURCE, "out of memory while sorting the pages by score; a smaller --memory needs less");
            goto out;
        }
    }
    if (!(status = windrow_crew_create(threads, &crew)))
        status = windrow_crew_run(crew, sorter->runs, sort_run, sorter);
out:
    windrow_crew_destroy(crew);
    for (unsigned worker = 0; worker < threads; worker++)
        free(sorter->room[worker]);
    free(sorter->room);
    sorter->room = NULL;
    return status;
}

static enum windrow_status write_order(const struct sorter *sorter, uint64_t memory_bytes, int descriptor, const char *path)
{
    enum windrow_status status = WINDROW_OK;
    struct windrow_order_layout layout = windrow_order_layout_of(sorter->pages);
    const uint64_t offsets[SECTIONS] = {WINDROW_ORDER_HEADER_BYTES, layout.scores_offset, layout.samples_offset};
    struct section sections[SECTIONS] = {0};
    for (int i = 0; i < SECTIONS; i++) {
        sections[i] = (struct section){.descriptor = descriptor, .path = path, .offset = offsets[i],
                                       .checksum = XXH3_createState(), .buffer = malloc(SECTION_BUFFER_BYTES)};
        if (!sections[i].checksum || !sections[i].buffer) {
            status = windrow_fail(WINDROW_RESOURCE, "out of memory while writing %s", path);
            goto out;
        }
        XXH3_64bits_reset(sections[i].checksum);
    }
    int error_number = windrow_files.reserve(descriptor, 0, (off_t)layout.file_bytes);
    if (error_number) {
        status = windrow_fail_system(WINDROW_RESOURCE, error_number, "cannot reserve %llu bytes for %s",
                                     (unsigned long long)layout.file_bytes, path);
        goto out;
    }
    if ((status = merge_runs(sorter, memory_bytes, sections, layout.id_bytes)))
        goto out;
    struct windrow_order_header header = {.version = WINDROW_ORDER_VERSION, .id_bytes = layout.id_bytes, .pages = sorter->pages, .stride = WINDROW_ORDER_STRIDE};
    memcpy(header.magic, WINDROW_ORDER_MAGIC, sizeof header.magic);
    for (int i = 0; i < SECTIONS; i++)
        if ((status = section_flush(&sections[i])))
            goto out;
    header.ids_checksum = XXH3_64bits_digest(sections[IDS].checksum);
    header.scores_checksum = XXH3_64bits_digest(sections[SCORES].checksum);
    header.samples_checksum = XXH3_64bits_digest(sections[SAMPLES].checksum);
    header.checksum = XXH3_64bits(&header, offsetof(struct windrow_order_header, checksum));
    if ((status = windrow_file_write_at(descriptor, path, &header, sizeof header, 0)))
        goto out;
    if (windrow_files.sync_data(descriptor))
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot sync %s", path);
out:
    for (int i = 0; i < SECTIONS; i++) {
        if (sections[i].checksum)
            XXH3_freeState(sections[i].checksum);
        free(sections[i].buffer);
    }
    return status;
}

static enum windrow_status sync_directory_of(const char *path)
{
    const char *slash = strrchr(path, '/');
    if (!slash)
        return windrow_directory_sync(".");
    char *directory = strndup(path, slash == path ? 1 : (size_t)(slash - path));
    if (!directory)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while writing %s", path);
    enum windrow_status status = windrow_directory_sync(directory);
    free(directory);
    return status;
}

enum windrow_status windrow_order_build(const char *scores_path, uint64_t scores_offset, uint64_t pages,
                                        uint64_t memory_bytes, unsigned threads, const char *path, struct windrow_meter *meter)
{
    enum windrow_status status = WINDROW_OK;
    struct sorter sorter = {.pages = pages, .scores = -1, .scores_path = scores_path, .scores_offset = scores_offset,
                            .scratch = -1, .meter = meter};
    char *aside = NULL;
    int descriptor = -1;
    bool aside_made = false;
    if (memory_bytes < WINDROW_ORDER_MEMORY_LEAST)
        memory_bytes = WINDROW_ORDER_MEMORY_LEAST;
    if (threads > memory_bytes / WINDROW_ORDER_MEMORY_LEAST) /* more would make runs too short to be worth it */
        threads = (unsigned)(memory_bytes / WINDROW_ORDER_MEMORY_LEAST);
    if (asprintf(&aside, "%s.new", path) < 0)
        aside = NULL;
    if (asprintf(&sorter.scratch_path, "%s.sort", path) < 0)
        sorter.scratch_path = NULL;
    if (!aside || !sorter.scratch_path) {
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while writing %s", path);
        goto out;
    }
    sorter.scores = windrow_files.open(scores_path, O_RDONLY, 0);
    if (sorter.scores < 0) {
        status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open %s", scores_path);
        goto out;
    }
    sorter.scratch = windrow_files.open(sorter.scratch_path, O_RDWR | O_CREAT | O_TRUNC, 0666);
    if (sorter.scratch < 0) {
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot create %s", sorter.scratch_path);
        goto out;
    }
    /* Without a name nothing is left behind, however this process ends. */
    if (windrow_files.unlink(sorter.scratch_path)) {
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot remove %s", sorter.scratch_path);
        goto out;
    }
    if ((status = sort_runs(&sorter, memory_bytes, threads ? threads : 1)))
        goto out;
    descriptor = windrow_files.open(aside, O_RDWR | O_CREAT | O_TRUNC, 0666);
    if (descriptor < 0) {
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot create %s", aside);
        goto out;
    }
    aside_made = true;
    if ((status = write_order(&sorter, memory_bytes, descriptor, aside)))
        goto out;
    int closed = windrow_files.close(descriptor);
    descriptor = -1;
    if (closed) {
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot close %s", aside);
        goto out;
    }
    if (windrow_files.rename(aside, path)) {
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot rename %s", aside);
        goto out;
    }
    aside_made = false;
    status = sync_directory_of(path);
out:
    if (descriptor >= 0)
        windrow_files.close(descriptor);
    if (aside_made)
        windrow_files.unlink(aside);
    if (sorter.scores >= 0)
        windrow_files.close(sorter.scores);
    if (sorter.scratch >= 0)
        windrow_files.close(sorter.scratch);
    free(sorter.scratch_path);
    free(aside);
    return status;
}
