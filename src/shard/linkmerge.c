#include "shard/linkmerge.h"

#include "shard/cutter.h"
#include "shard/linkrun.h"
#include "shard/remap.h"
#include "shard/sealed.h"

#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory while merging links; try a smaller --memory or fewer --threads");
}

struct merging {
    const struct windrow_linkmerge *merge;
    uint64_t segment;
    struct windrow_linkrun_reader *readers;
    uint64_t *heap;              /* runs by their current target */
    uint64_t heap_count;
    uint64_t *meeting;           /* runs that hold links to the current page */
    uint64_t *sides[2];          /* merged sources, back and forth */
    size_t side_capacity;
    size_t *slice_at;            /* where each run's slice begins in a side */
    struct windrow_cutter cutters[WINDROW_BLOCK_KINDS];
    struct windrow_writer corrections;
    uint32_t *inside;
    struct windrow_linkmerge_head head;
};

/* ---- A heap of runs ---- */

static bool before(const struct merging *merging, uint64_t a, uint64_t b)
{
    uint64_t left = merging->readers[a].target, right = merging->readers[b].target;
    return left != right ? left < right : a < b;
}

static void heap_put(struct merging *merging, uint64_t run)
{
    uint64_t at = merging->heap_count++;
    while (at && before(merging, run, merging->heap[(at - 1) / 2])) {
        merging->heap[at] = merging->heap[(at - 1) / 2];
        at = (at - 1) / 2;
    }
    merging->heap[at] = run;
}

static uint64_t heap_take(struct merging *merging)
{
    uint64_t first = merging->heap[0], last = merging->heap[--merging->heap_count], at = 0;
    for (;;) {
        uint64_t child = 2 * at + 1;
        if (child >= merging->heap_count)
            break;
        if (child + 1 < merging->heap_count && before(merging, merging->heap[child + 1], merging->heap[child]))
            child++;
        if (!before(merging, merging->heap[child], last))
            break;
        merging->heap[at] = merging->heap[child];
        at = child;
    }
    merging->heap[at] = last;
    return first;
}

/* ---- Merging one list ---- */

static enum windrow_status correct(struct merging *merging, uint64_t correction)
{
    return windrow_writer_append(&merging->corrections, &correction, sizeof correction);
}

/* Merges two ascending slices; a source in both is kept once and noted. */
static enum windrow_status merge_two(struct merging *merging, const uint64_t *a, size_t a_count, const uint64_t *b, size_t b_count, uint64_t *out,
                                     size_t *out_count)
{
    const uint64_t *a_end = a + a_count, *b_end = b + b_count;
    uint64_t *to = out;
    while (a < a_end && b < b_end) {
        if (*a == *b) {
            enum windrow_status status = correct(merging, *a * 2);
            if (status)
                return status;
            merging->head.duplicates++;
            b++;
            continue;
        }
        /* Which side is next is a coin toss, so it is computed, not branched on. */
        bool left = *a < *b;
        *to++ = left ? *a : *b;
        a += left;
        b += !left;
    }
    memcpy(to, a, (size_t)(a_end - a) * sizeof *to);
    to += a_end - a;
    memcpy(to, b, (size_t)(b_end - b) * sizeof *to);
    to += b_end - b;
    *out_count = (size_t)(to - out);
    return WINDROW_OK;
}

/* Merges `count` slices that stand one after another in side 0 by halves; *merged is where the result is. */
static enum windrow_status merge_slices(struct merging *merging, size_t count, const uint64_t **merged, size_t *merged_count)
{
    size_t *at = merging->slice_at;
    int from = 0;
    while (count > 1) {
        uint64_t *in = merging->sides[from], *out = merging->sides[1 - from];
        size_t written = 0, slices = 0;
        for (size_t slice = 0; slice < count; slice += 2) {
            size_t begin = at[slice], middle = at[slice + 1], end = slice + 1 < count ? at[slice + 2] : middle, got;
            enum windrow_status status = merge_two(merging, in + begin, middle - begin, in + middle, end - middle, out + written, &got);
            if (status)
                return status;
            at[slices++] = written;
            written += got;
        }
        at[slices] = written;
        count = slices;
        from = 1 - from;
    }
    *merged = merging->sides[from];
    *merged_count = at[1];
    return WINDROW_OK;
}

static size_t lower_bound(const uint64_t *numbers, size_t count, uint64_t limit)
{
    size_t low = 0, high = count;
    while (low < high) {
        size_t middle = (low + high) / 2;
        if (numbers[middle] < limit)
            low = middle + 1;
        else
            high = middle;
    }
    return low;
}

/* Counts the links that stay among the core pages of a host. */
static enum windrow_status count_inside(struct merging *merging, const uint64_t *sources, size_t count, uint64_t host_first, uint64_t host_end)
{
    uint64_t first = merging->merge->segment_cores[merging->segment], end = merging->merge->segment_cores[merging->segment + 1];
    for (size_t index = lower_bound(sources, count, host_first); index < count && sources[index] < host_end; index++) {
        if (sources[index] >= first && sources[index] < end) {
            merging->inside[sources[index] - first]++;
        } else {
            enum windrow_status status = correct(merging, sources[index] * 2 + 1);
            if (status)
                return status;
        }
    }
    return WINDROW_OK;
}

/* The page's sources are taken a window at a time: all those that no run can still undercut. */
static enum windrow_status merge_list(struct merging *merging, uint64_t page, struct windrow_cutter *cutter, uint64_t host_first, uint64_t host_end)
{
    enum windrow_status status;
    uint64_t meeting_count = 0;
    while (merging->heap_count && merging->readers[merging->heap[0]].target == page)
        merging->meeting[meeting_count++] = heap_take(merging);
    while (meeting_count) {
        uint64_t limit = UINT64_MAX;
        for (uint64_t index = 0; index < meeting_count; index++) {
            const struct windrow_linkrun_reader *reader = &merging->readers[merging->meeting[index]];
            if (reader->more && reader->sources[reader->count - 1] < limit)
                limit = reader->sources[reader->count - 1];
        }
        size_t slices = 0, filled = 0;
        const uint64_t *sources = NULL;
        size_t count = 0;
        for (uint64_t index = 0; index < meeting_count; index++) {
            struct windrow_linkrun_reader *reader = &merging->readers[merging->meeting[index]];
            size_t end = limit == UINT64_MAX ? reader->count : lower_bound(reader->sources, reader->count, limit + 1);
            sources = reader->sources + reader->used;
            count = end - reader->used;
            if (meeting_count > 1) {
                merging->slice_at[slices++] = filled;
                memcpy(merging->sides[0] + filled, sources, count * sizeof *sources);
                filled += count;
            }
            reader->used = end;
        }
        if (meeting_count > 1) {
            merging->slice_at[slices] = filled;
            if ((status = merge_slices(merging, slices, &sources, &count)))
                return status;
        }
        if ((status = windrow_cutter_sources(cutter, sources, count)))
            return status;
        merging->head.links += count;
        if (cutter->kind == WINDROW_BLOCK_CORE) {
            merging->head.core_links += count;
            if ((status = count_inside(merging, sources, count, host_first, host_end)))
                return status;
        }
        /* Runs that gave all of an entry go on to the next one; those that have left the page go back into the heap. */
        uint64_t staying = 0;
        for (uint64_t index = 0; index < meeting_count; index++) {
            uint64_t run = merging->meeting[index];
            struct windrow_linkrun_reader *reader = &merging->readers[run];
            if (reader->used == reader->count) {
                bool more = reader->more;
                if ((status = windrow_linkrun_next(reader)))
                    return status;
                if (reader->ended)
                    continue;
                if (!more) {
                    heap_put(merging, run);
                    continue;
                }
            }
            merging->meeting[staying++] = run;
        }
        meeting_count = staying;
    }
    return WINDROW_OK;
}

static enum windrow_status merge_pages(struct merging *merging)
{
    const struct windrow_linkmerge *merge = merging->merge;
    uint64_t first = merging->segment * WINDROW_SEGMENT_PAGES;
    uint64_t end = first + WINDROW_SEGMENT_PAGES < merge->pages ? first + WINDROW_SEGMENT_PAGES : merge->pages;
    uint64_t low = 0, high = merge->host_count; /* the host of the first page */
    while (high - low > 1) {
        uint64_t middle = low + (high - low) / 2;
        if (merge->hosts[middle].first_page <= first)
            low = middle;
        else
            high = middle;
    }
    uint64_t host = low, counted = 0;
    for (uint64_t page = first; page < end; page++) {
        while (merge->hosts[host + 1].first_page <= page)
            host++;
        const struct windrow_core_group *group = &merge->core_groups[page / WINDROW_CORE_GROUP_PAGES];
        bool core = group->core[(page % WINDROW_CORE_GROUP_PAGES) / 64] >> (page % 64) & 1;
        struct windrow_cutter *cutter = &merging->cutters[core ? WINDROW_BLOCK_CORE : WINDROW_BLOCK_RIM];
        uint64_t host_first = merge->hosts[host].first_core, host_end = merge->hosts[host + 1].first_core;
        enum windrow_status status = core ? windrow_cutter_list(cutter, host_first, host_end)
                                          : windrow_cutter_list(cutter, merge->hosts[host].first_page, merge->hosts[host + 1].first_page);
        if (!status)
            status = merge_list(merging, page, cutter, host_first, host_end);
        if (status)
            return status;
        if (merge->meter && page % 4096 == 4095) {
            windrow_meter_add(merge->meter, merging->head.links - counted);
            counted = merging->head.links;
            if (windrow_meter_stopping(merge->meter))
                return windrow_fail(WINDROW_STOPPED, "stopped; run the same command again to go on");
        }
    }
    if (merge->meter)
        windrow_meter_add(merge->meter, merging->head.links - counted);
    if (merging->heap_count)
        return windrow_fail(WINDROW_DAMAGED, "the rewritten links in %s do not fit the pages; remove the unfinished store and shard again", merge->scratch);
    return WINDROW_OK;
}

static enum windrow_status open_runs(struct merging *merging)
{
    const struct windrow_linkmerge *merge = merging->merge;
    for (uint64_t run = 0; run < merge->run_count; run++) {
        uint64_t begin, end;
        enum windrow_status status = windrow_remap_segment(merge->scratch, run, merging->segment, &begin, &end);
        if (status)
            return status;
        if (begin == end)
            continue;
        char *path = windrow_path(merge->scratch, "batch-%06llu.sorted", (unsigned long long)run);
        if (!path)
            return memory();
        struct windrow_linkrun_reader *reader = &merging->readers[run];
        status = windrow_linkrun_reader_open(reader, path);
        free(path);
        if (status)
            return status;
        windrow_linkrun_seek(reader, begin, end);
        if ((status = windrow_linkrun_next(reader)))
            return status;
        if (!reader->ended)
            heap_put(merging, run);
    }
    return WINDROW_OK;
}

static enum windrow_status write_head(struct merging *merging)
{
    char *path = windrow_path(merging->merge->scratch, "segment-%06llu.links", (unsigned long long)merging->segment);
    if (!path)
        return memory();
    struct windrow_buffer bytes = {0};
    enum windrow_status status = windrow_buffer_append(&bytes, &merging->head, sizeof merging->head);
    for (int kind = 0; !status && kind < WINDROW_BLOCK_KINDS; kind++)
        status = windrow_buffer_append(&bytes, merging->cutters[kind].records.data, merging->cutters[kind].records.bytes);
    if (!status)
        status = windrow_buffer_append(&bytes, merging->inside, merging->head.core_pages * sizeof *merging->inside);
    if (!status)
        status = windrow_sealed_replace(path, bytes.data, bytes.bytes);
    windrow_buffer_free(&bytes);
    free(path);
    return status;
}

enum windrow_status windrow_linkmerge_segment(const struct windrow_linkmerge *merge, uint64_t segment)
{
    enum windrow_status status = WINDROW_OK;
    uint64_t runs = merge->run_count, first_core = merge->segment_cores[segment], first_page = segment * WINDROW_SEGMENT_PAGES;
    struct merging merging = {.merge = merge, .segment = segment, .corrections.descriptor = -1};
    merging.head.core_pages = merge->segment_cores[segment + 1] - first_core;
    merging.readers = calloc(runs + 1, sizeof *merging.readers);
    merging.heap = calloc(runs + 1, sizeof *merging.heap);
    merging.meeting = calloc(runs + 1, sizeof *merging.meeting);
    merging.slice_at = calloc(runs + 2, sizeof *merging.slice_at);
    merging.sides[0] = malloc((runs + 1) * WINDROW_LINKRUN_SOURCES * sizeof(uint64_t));
    merging.sides[1] = malloc((runs + 1) * WINDROW_LINKRUN_SOURCES * sizeof(uint64_t));
    merging.inside = calloc(merging.head.core_pages + 1, sizeof *merging.inside);
    char *corrections_path = windrow_path(merge->scratch, "segment-%06llu.corrections", (unsigned long long)segment);
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
        merging.cutters[kind].file.descriptor = -1;
    if (!merging.readers || !merging.heap || !merging.meeting || !merging.slice_at || !merging.sides[0] || !merging.sides[1] || !merging.inside ||
        !corrections_path) {
        status = memory();
        goto out;
    }
    for (uint64_t run = 0; run < runs; run++)
        merging.readers[run].frames.descriptor = -1;
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++) {
        char name[64];
        windrow_layout_block_file(name, sizeof name, kind, segment);
        char *path = windrow_path(merge->store, "%s", name);
        status = path ? windrow_cutter_open(&merging.cutters[kind], kind, (uint32_t)segment, kind == WINDROW_BLOCK_CORE ? first_core : first_page - first_core, path)
                      : memory();
        free(path);
        if (status)
            goto out;
    }
    if ((status = windrow_writer_open(&merging.corrections, corrections_path, true)) || (status = open_runs(&merging)) ||
        (status = merge_pages(&merging)))
        goto out;
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++) {
        struct windrow_cutter *cutter = &merging.cutters[kind];
        if ((status = windrow_cutter_finish(cutter, &merging.head.file_bytes[kind], &merging.head.file_checksums[kind])))
            goto out;
        merging.head.block_counts[kind] = cutter->records.bytes / sizeof(struct windrow_block_record);
    }
    if ((status = windrow_writer_seal(&merging.corrections)) || (status = windrow_writer_finish(&merging.corrections, NULL)))
        goto out;
    status = write_head(&merging);
    /* What was read of the mapped tables counts as resident until it is let go; others that still need a page get it again. */
    madvise((void *)merge->hosts, (merge->host_count + 1) * sizeof *merge->hosts, MADV_DONTNEED);
    madvise((void *)merge->core_groups, (merge->pages / WINDROW_CORE_GROUP_PAGES + 1) * sizeof *merge->core_groups, MADV_DONTNEED);
out:
    if (merging.readers)
        for (uint64_t run = 0; run < runs; run++)
            windrow_linkrun_reader_close(&merging.readers[run]);
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
        windrow_cutter_free(&merging.cutters[kind]);
    windrow_writer_abandon(&merging.corrections);
    free(merging.readers);
    free(merging.heap);
    free(merging.meeting);
    free(merging.slice_at);
    free(merging.sides[0]);
    free(merging.sides[1]);
    free(merging.inside);
    free(corrections_path);
    return status;
}

/* ---- After all segments ---- */

static enum windrow_status load(const char *scratch, uint64_t segment, struct windrow_buffer *bytes, struct windrow_linkmerge_head *head)
{
    char *path = windrow_path(scratch, "segment-%06llu.links", (unsigned long long)segment);
    if (!path)
        return memory();
    enum windrow_status status = windrow_sealed_load(path, bytes);
    if (!status) {
        bool good = bytes->bytes >= sizeof *head;
        if (good)
            memcpy(head, bytes->data, sizeof *head);
        if (!good || bytes->bytes != sizeof *head + (head->block_counts[0] + head->block_counts[1]) * sizeof(struct windrow_block_record) +
                                         head->core_pages * sizeof(uint32_t))
            status = windrow_fail(WINDROW_DAMAGED, "the scratch file %s is damaged; remove the unfinished store and shard again", path);
    }
    free(path);
    return status;
}

enum windrow_status windrow_linkmerge_head(const char *scratch, uint64_t segment, struct windrow_linkmerge_head *head, struct windrow_buffer *records)
{
    struct windrow_buffer bytes = {0};
    enum windrow_status status = load(scratch, segment, &bytes, head);
    records->bytes = 0;
    if (!status)
        status = windrow_buffer_append(records, bytes.data + sizeof *head,
                                       (head->block_counts[0] + head->block_counts[1]) * sizeof(struct windrow_block_record));
    windrow_buffer_free(&bytes);
    return status;
}

/* Applies the corrections of all segments to the core pages [first, end). */
static enum windrow_status apply_corrections(const struct windrow_linkmerge *merge, uint64_t first, uint64_t end, uint32_t *degrees, uint32_t *inside)
{
    uint64_t *block = malloc(65536 * sizeof *block);
    if (!block)
        return memory();
    enum windrow_status status = WINDROW_OK;
    for (uint64_t segment = 0; !status && segment < merge->segment_count; segment++) {
        char *path = windrow_path(merge->scratch, "segment-%06llu.corrections", (unsigned long long)segment);
        uint64_t content_bytes = 0;
        status = path ? windrow_sealed_check(path, &content_bytes) : memory();
        int descriptor = status ? -1 : windrow_files.open(path, O_RDONLY, 0);
        if (!status && descriptor < 0)
            status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open the scratch file %s", path);
        uint64_t count = content_bytes / sizeof *block;
        for (uint64_t at = 0; !status && at < count; at += 65536) {
            size_t part = count - at < 65536 ? (size_t)(count - at) : 65536;
            status = windrow_file_read_at(descriptor, path, block, part * sizeof *block, at * sizeof *block);
            for (size_t index = 0; !status && index < part; index++) {
                uint64_t source = block[index] / 2;
                if (source < first || source >= end)
                    continue;
                if (block[index] & 1)
                    inside[source - first]++;
                else
                    degrees[source - first]--;
            }
        }
        if (descriptor >= 0)
            windrow_files.close(descriptor);
        free(path);
    }
    free(block);
    return status;
}

/* Copies the inside out-degrees that the segments counted for their own pages, as far as they lie in [first, end). */
static enum windrow_status load_inside(const struct windrow_linkmerge *merge, uint64_t first, uint64_t end, uint32_t *inside)
{
    struct windrow_buffer bytes = {0};
    enum windrow_status status = WINDROW_OK;
    for (uint64_t segment = 0; !status && segment < merge->segment_count; segment++) {
        uint64_t begin = merge->segment_cores[segment], stop = merge->segment_cores[segment + 1];
        uint64_t from = begin > first ? begin : first, to = stop < end ? stop : end;
        if (from >= to)
            continue;
        struct windrow_linkmerge_head head;
        if ((status = load(merge->scratch, segment, &bytes, &head)))
            break;
        const uint8_t *numbers = bytes.data + bytes.bytes - head.core_pages * sizeof(uint32_t);
        memcpy(inside + (from - first), numbers + (from - begin) * sizeof(uint32_t), (to - from) * sizeof(uint32_t));
    }
    windrow_buffer_free(&bytes);
    return status;
}

enum windrow_status windrow_linkmerge_degrees(const struct windrow_linkmerge *merge, uint64_t memory_bytes)
{
    uint64_t step = memory_bytes / 8 < (1u << 20) ? 1u << 20 : memory_bytes / 8;
    if (step > merge->core_pages)
        step = merge->core_pages + 1;
    enum windrow_status status = WINDROW_OK;
    struct windrow_writer out[2] = {{.descriptor = -1}, {.descriptor = -1}};
    uint32_t *degrees = malloc(step * sizeof *degrees), *inside = malloc(step * sizeof *inside);
    char *raw_path = windrow_path(merge->scratch, "raw-degrees");
    char *paths[2] = {windrow_path(merge->store, "degrees"), windrow_path(merge->store, "inside-degrees")};
    int raw = -1;
    if (!degrees || !inside || !raw_path || !paths[0] || !paths[1]) {
        status = memory();
        goto out;
    }
    uint64_t raw_bytes;
    if ((status = windrow_sealed_check(raw_path, &raw_bytes)))
        goto out;
    if ((raw = windrow_files.open(raw_path, O_RDONLY, 0)) < 0) {
        status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open the scratch file %s", raw_path);
        goto out;
    }
    for (int file = 0; file < 2; file++)
        if ((status = windrow_writer_open(&out[file], paths[file], false)))
            goto out;
    for (uint64_t first = 0; first < merge->core_pages; first += step) {
        uint64_t end = first + step < merge->core_pages ? first + step : merge->core_pages;
        memset(inside, 0, (end - first) * sizeof *inside);
        if ((status = windrow_file_read_at(raw, raw_path, degrees, (end - first) * sizeof *degrees, first * sizeof *degrees)) ||
            (status = load_inside(merge, first, end, inside)) || (status = apply_corrections(merge, first, end, degrees, inside)) ||
            (status = windrow_writer_append(&out[0], degrees, (end - first) * sizeof *degrees)) ||
            (status = windrow_writer_append(&out[1], inside, (end - first) * sizeof *inside)))
            goto out;
    }
    for (int file = 0; !status && file < 2; file++)
        status = windrow_writer_finish(&out[file], NULL);
out:
    for (int file = 0; file < 2; file++) {
        windrow_writer_abandon(&out[file]);
        free(paths[file]);
    }
    if (raw >= 0)
        windrow_files.close(raw);
    free(raw_path);
    free(degrees);
    free(inside);
    return status;
}

uint64_t windrow_linkmerge_memory_bytes(uint64_t run_count)
{
    /* A run: its frames and decompressor, its entry, its share of both sides. A block under way: sources, codes, frame. */
    return run_count * ((400u << 10) + 3 * WINDROW_LINKRUN_SOURCES * sizeof(uint64_t)) + (24u << 20);
}
