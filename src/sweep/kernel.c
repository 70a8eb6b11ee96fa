#include "sweep/kernel.h"

#include <math.h>
#include <string.h>

#define ALWAYS_INLINE inline __attribute__((always_inline))

void windrow_kernel_free(struct windrow_kernel *kernel)
{
    windrow_buffer_free(&kernel->numbers);
    windrow_buffer_free(&kernel->far_memory);
    *kernel = (struct windrow_kernel){0};
}

static enum windrow_status damaged(const struct windrow_kernel *kernel, const char *what)
{
    return windrow_fail(WINDROW_DAMAGED,
                        "the block of targets %llu and following (segment %u, byte %llu) is damaged: %s; run `windrow verify` on the store",
                        (unsigned long long)kernel->record->first_target, kernel->record->segment,
                        (unsigned long long)kernel->record->offset, what);
}

static ALWAYS_INLINE uint64_t number_at(const struct windrow_numbers *numbers, uint64_t i, bool wide)
{
    return wide ? numbers->wide[i] : numbers->narrow[i];
}

static bool is_wide(const struct windrow_kernel *kernel)
{
    return kernel->block.flags & WINDROW_BLOCK_WIDE;
}

/* ---- Loading ------------------------------------------------------------------------------- */

static uint64_t total_of(const struct windrow_kernel *kernel, const struct windrow_numbers *counts)
{
    bool wide = is_wide(kernel);
    uint64_t total = 0;
    for (uint32_t t = 0; t < counts->count; t++) {
        uint64_t count = number_at(counts, t, wide);
        if (count > UINT32_MAX)
            return UINT64_MAX;
        total += count;
    }
    return total;
}

enum windrow_status windrow_kernel_load(struct windrow_kernel *kernel, const struct windrow_block *block,
                                        const struct windrow_block_record *record)
{
    kernel->block = *block;
    kernel->record = record;
    const struct windrow_stream *streams[] = {&block->far_counts, &block->near_counts, &block->run_counts,
                                              &block->far_gaps, &block->near_gaps, &block->runs};
    struct windrow_numbers *numbers[] = {&kernel->far_counts, &kernel->near_counts, &kernel->run_counts,
                                         &kernel->far_gaps, &kernel->near_gaps, &kernel->runs};
    bool wide = is_wide(kernel);
    size_t total = 0;
    for (int s = 0; s < 6; s++)
        total += (size_t)streams[s]->count + 4;
    kernel->numbers.bytes = kernel->far_memory.bytes = 0;
    enum windrow_status status = windrow_buffer_reserve(&kernel->numbers, total * (wide ? 8 : 4));
    if (!status)
        status = windrow_buffer_reserve(&kernel->far_memory, (size_t)block->target_count * sizeof *kernel->far);
    if (status)
        return status;
    kernel->far = (double *)(void *)kernel->far_memory.data;
    uint8_t *memory = kernel->numbers.data;
    for (int s = 0; s < 6; s++) {
        numbers[s]->count = streams[s]->count;
        numbers[s]->narrow = (uint32_t *)(void *)memory;
        if (wide)
            windrow_stream_decode_wide(streams[s], numbers[s]->wide);
        else
            windrow_stream_decode(streams[s], numbers[s]->narrow);
        memory += ((size_t)streams[s]->count + 4) * (wide ? 8 : 4);
    }
    if (total_of(kernel, &kernel->far_counts) != kernel->far_gaps.count ||
        total_of(kernel, &kernel->near_counts) != kernel->near_gaps.count ||
        total_of(kernel, &kernel->run_counts) != kernel->runs.count / 2 || kernel->runs.count % 2)
        return damaged(kernel, "its counts do not add up");
    return WINDROW_OK;
}

/* ---- Sums ---------------------------------------------------------------------------------- */

/* Neumaier 1974: the rounding errors of the additions, summed apart. */
struct compensated {
    double sum;
    double error;
};

static ALWAYS_INLINE void compensated_add(struct compensated *total, double value)
{
    double sum = total->sum + value;
    total->error += fabs(total->sum) >= fabs(value) ? (total->sum - sum) + value : (value - sum) + total->sum;
    total->sum = sum;
}

/* The values of at most WINDROW_CHUNK_LINKS sources. */
static ALWAYS_INLINE double chunk_sum(const double *values, const uint64_t *ids, uint32_t count)
{
    double lane0 = 0, lane1 = 0, lane2 = 0, lane3 = 0;
    uint32_t i = 0;
    for (; i + 4 <= count; i += 4) {
        lane0 += values[ids[i]];
        lane1 += values[ids[i + 1]];
        lane2 += values[ids[i + 2]];
        lane3 += values[ids[i + 3]];
    }
    if (i < count)
        lane0 += values[ids[i]];
    if (i + 1 < count)
        lane1 += values[ids[i + 1]];
    if (i + 2 < count)
        lane2 += values[ids[i + 2]];
    return (lane0 + lane1) + (lane2 + lane3);
}

/* The same for consecutive sources. */
static ALWAYS_INLINE double chunk_sum_run(const double *values, uint64_t count)
{
    double lane0 = 0, lane1 = 0, lane2 = 0, lane3 = 0;
    uint64_t i = 0;
    for (; i + 4 <= count; i += 4) {
        lane0 += values[i];
        lane1 += values[i + 1];
        lane2 += values[i + 2];
        lane3 += values[i + 3];
    }
    if (i < count)
        lane0 += values[i];
    if (i + 1 < count)
        lane1 += values[i + 1];
    if (i + 2 < count)
        lane2 += values[i + 2];
    return (lane0 + lane1) + (lane2 + lane3);
}

double windrow_kernel_roundings(uint64_t links)
{
    /* A lane's additions, the joining of lanes, the joining of chunks and of parts. */
    uint64_t lane = links < WINDROW_CHUNK_LINKS ? (links + 3) / 4 : WINDROW_CHUNK_LINKS / 4;
    return (double)lane + 5;
}

static ALWAYS_INLINE uint64_t unzigzag(uint64_t number)
{
    return (number >> 1) ^ (0 - (number & 1));
}

/* ---- Far sources --------------------------------------------------------------------------- */

/* A stretch of the far sources, at most a chunk of them: whole lists, or a part of one long list. Its ids
 * are worked out, and their values asked for, one batch before they are added up. */
struct batch {
    uint32_t target, target_end; /* the lists of these targets; a long list's part has one target */
    uint32_t id_count;
    bool part;                   /* of a long list; `begins` and `ends` say which */
    bool begins, ends;
    uint64_t ids[WINDROW_CHUNK_LINKS];
};

/* Where the reading of far lists stands. */
struct far_cursor {
    uint32_t target;
    uint32_t taken;     /* of the current target's list */
    uint64_t gap;       /* next of the far gaps */
    uint64_t list_first;
    uint64_t id;        /* the last one */
};

static ALWAYS_INLINE bool fill_list(const struct windrow_kernel *kernel, const double *values, uint64_t core_pages, bool wide,
                                    struct far_cursor *cursor, struct batch *batch, uint32_t count, bool begins)
{
    uint64_t *ids = batch->ids + batch->id_count, id = cursor->id, gap = cursor->gap, i = 0;
    if (begins) {
        id = cursor->list_first += unzigzag(number_at(&kernel->far_gaps, gap, wide));
        if (id >= core_pages)
            return false;
        __builtin_prefetch(values + id);
        ids[i++] = id;
    }
    for (; i < count; i++) {
        id += number_at(&kernel->far_gaps, gap + i, wide) + 1;
        /* Narrow gaps cannot lead around the end of 64 bits: looking at the last id is enough. */
        if (wide && id >= core_pages)
            return false;
        __builtin_prefetch(values + id);
        ids[i] = id;
    }
    cursor->id = id;
    cursor->gap = gap + count;
    batch->id_count += count;
    return id < core_pages;
}

static ALWAYS_INLINE bool fill_batch(const struct windrow_kernel *kernel, const double *values, uint64_t core_pages, bool wide,
                                     struct far_cursor *cursor, struct batch *batch)
{
    uint32_t targets = kernel->block.target_count;
    batch->target = cursor->target;
    batch->id_count = 0;
    batch->part = false;
    while (cursor->target < targets) {
        uint64_t count = number_at(&kernel->far_counts, cursor->target, wide);
        if (count > WINDROW_CHUNK_LINKS) {
            if (cursor->target > batch->target)
                break;
            uint64_t left = count - cursor->taken;
            uint32_t take = left < WINDROW_CHUNK_LINKS ? (uint32_t)left : WINDROW_CHUNK_LINKS;
            batch->part = true;
            batch->begins = cursor->taken == 0;
            batch->ends = take == left;
            if (!fill_list(kernel, values, core_pages, wide, cursor, batch, take, batch->begins))
                return false;
            cursor->taken = batch->ends ? 0 : cursor->taken + take;
            cursor->target += batch->ends;
            batch->target_end = batch->target + 1;
            return true;
        }
        if (batch->id_count + count > WINDROW_CHUNK_LINKS)
            break;
        if (count && !fill_list(kernel, values, core_pages, wide, cursor, batch, (uint32_t)count, true))
            return false;
        cursor->target++;
    }
    batch->target_end = cursor->target;
    return true;
}

/* Adds what a list's sources inside the host pass on. Ids ascend, so that most lists are in or out at a glance. */
static void add_own(struct windrow_own *own, const double *values, const uint64_t *ids, uint32_t count, double sum)
{
    if (ids[0] >= own->first && ids[count - 1] < own->end) {
        own->sum += sum;
        return;
    }
    if (ids[0] >= own->end || ids[count - 1] < own->first)
        return;
    double inside = 0;
    for (uint32_t i = 0; i < count; i++)
        inside += ids[i] >= own->first && ids[i] < own->end ? values[ids[i]] : 0;
    own->sum += inside;
}

static ALWAYS_INLINE void sum_batch(struct windrow_kernel *kernel, const double *values, bool wide, const struct batch *batch,
                                    struct compensated *total, struct windrow_own own[2])
{
    const uint64_t *ids = batch->ids;
    for (uint32_t t = batch->target; t < batch->target_end; t++) {
        uint32_t count = batch->part ? batch->id_count : (uint32_t)number_at(&kernel->far_counts, t, wide);
        double sum = count ? chunk_sum(values, ids, count) : 0;
        for (int side = 0; own && side < 2 && count; side++)
            if (t >= own[side].target_first && t < own[side].target_end)
                add_own(&own[side], values, ids, count, sum);
        ids += count;
        if (!batch->part) {
            kernel->far[t] = sum;
            continue;
        }
        if (batch->begins)
            *total = (struct compensated){0};
        compensated_add(total, sum);
        if (batch->ends)
            kernel->far[t] = total->sum + total->error;
    }
}

static ALWAYS_INLINE bool gather(struct windrow_kernel *kernel, const double *values, uint64_t core_pages, bool wide,
                                 struct windrow_own own[2])
{
    struct batch batches[2];
    struct compensated total = {0};
    struct far_cursor cursor = {.list_first = kernel->block.far_base};
    uint32_t targets = kernel->block.target_count;
    unsigned now = 0;
    if (!fill_batch(kernel, values, core_pages, wide, &cursor, &batches[0]))
        return false;
    for (bool more = true; more; now ^= 1) {
        more = cursor.target < targets;
        if (more && !fill_batch(kernel, values, core_pages, wide, &cursor, &batches[now ^ 1]))
            return false;
        sum_batch(kernel, values, wide, &batches[now], &total, own);
    }
    return true;
}

enum windrow_status windrow_kernel_gather(struct windrow_kernel *kernel, const double *values, uint64_t core_pages,
                                          struct windrow_own own[2])
{
    for (int side = 0; own && side < 2; side++)
        own[side].sum = 0;
    if (kernel->far_counts.count == 0) {
        memset(kernel->far, 0, kernel->block.target_count * sizeof *kernel->far);
        return WINDROW_OK;
    }
    bool fine = is_wide(kernel) ? gather(kernel, values, core_pages, true, own) : gather(kernel, values, core_pages, false, own);
    return fine ? WINDROW_OK : damaged(kernel, "a far source does not exist");
}

/* ---- Near sources and runs ----------------------------------------------------------------- */

static ALWAYS_INLINE void add_near(const struct windrow_kernel *kernel, struct windrow_near_cursor *cursor, bool wide, uint64_t left,
                                   struct compensated *total)
{
    uint64_t ids[WINDROW_CHUNK_LINKS], id = 0;
    for (bool begins = true; left > 0; begins = false) {
        uint32_t take = left < WINDROW_CHUNK_LINKS ? (uint32_t)left : WINDROW_CHUNK_LINKS, i = 0;
        if (begins)
            id = ids[i++] = cursor->near_first += unzigzag(number_at(&kernel->near_gaps, cursor->near, wide));
        bool wrong = id >= cursor->count;
        for (; i < take; i++) {
            ids[i] = id += number_at(&kernel->near_gaps, cursor->near + i, wide) + 1;
            if (wide)
                wrong |= id >= cursor->count;
        }
        if (wrong || id >= cursor->count) {
            cursor->wrong = true;
            return;
        }
        compensated_add(total, chunk_sum(cursor->values, ids, take));
        cursor->near += take;
        left -= take;
    }
}

static ALWAYS_INLINE void add_runs(const struct windrow_kernel *kernel, struct windrow_near_cursor *cursor, bool wide, uint64_t left,
                                   struct compensated *total)
{
    uint64_t end = 0;
    for (bool begins = true; left > 0; begins = false, left--) {
        uint64_t start = number_at(&kernel->runs, cursor->run, wide);
        uint64_t length = number_at(&kernel->runs, cursor->run + 1, wide) + WINDROW_RUN_LEAST;
        start = begins ? cursor->run_first + unzigzag(start) : end + start;
        if (begins)
            cursor->run_first = start;
        if (start >= cursor->count || length > cursor->count - start) {
            cursor->wrong = true;
            return;
        }
        end = start + length;
        for (uint64_t at = start; at < end; at += WINDROW_CHUNK_LINKS)
            compensated_add(total, chunk_sum_run(cursor->values + at, end - at < WINDROW_CHUNK_LINKS ? end - at : WINDROW_CHUNK_LINKS));
        cursor->run_links += length;
        cursor->run += 2;
    }
}

/* The sum over target t's near sources and runs, added to its far sum. */
static ALWAYS_INLINE double next_sum(const struct windrow_kernel *kernel, struct windrow_near_cursor *cursor, bool wide, uint32_t t)
{
    struct compensated total = {.sum = kernel->far[t]};
    uint64_t near = kernel->near_counts.count ? number_at(&kernel->near_counts, t, wide) : 0;
    uint64_t runs = kernel->run_counts.count ? number_at(&kernel->run_counts, t, wide) : 0;
    if (near)
        add_near(kernel, cursor, wide, near, &total);
    if (runs && !cursor->wrong)
        add_runs(kernel, cursor, wide, runs, &total);
    return total.sum + total.error;
}

static struct windrow_near_cursor cursor_at(const struct windrow_kernel *kernel, const double *values, uint64_t origin, uint64_t count)
{
    return (struct windrow_near_cursor){.values = values, .count = count,
                                        .near_first = kernel->block.near_base - origin, .run_first = kernel->block.run_base - origin};
}

struct windrow_near_cursor windrow_kernel_near_begin(const struct windrow_kernel *kernel, const double *values)
{
    return cursor_at(kernel, values, kernel->block.first_target, kernel->block.target_count);
}

static ALWAYS_INLINE bool relax(struct windrow_kernel *kernel, const struct windrow_relaxation *relaxation, bool wide,
                                struct windrow_near_cursor *cursor, uint32_t first, uint32_t end, double *values, double *change)
{
    double beta = relaxation->beta, total = 0;
    for (uint32_t t = first; t < end; t++) {
        double sum = next_sum(kernel, cursor, wide, t);
        if (cursor->wrong)
            return false;
        double jump = relaxation->jumps ? (1 - beta) * relaxation->jumps[t] : relaxation->jump;
        double score = jump + beta * sum, degree = relaxation->degrees[t];
        total += fabs(score - values[t] * degree);
        values[t] = score / degree;
    }
    *change = total;
    return true;
}

enum windrow_status windrow_kernel_relax(struct windrow_kernel *kernel, const struct windrow_relaxation *relaxation,
                                         struct windrow_near_cursor *cursor, uint32_t first, uint32_t end, double *values, double *change)
{
    bool fine = is_wide(kernel) ? relax(kernel, relaxation, true, cursor, first, end, values, change)
                                : relax(kernel, relaxation, false, cursor, first, end, values, change);
    return fine ? WINDROW_OK : damaged(kernel, "a near source lies outside");
}

static ALWAYS_INLINE bool sums_of(struct windrow_kernel *kernel, const double *values, uint64_t core_pages, bool wide, double *sums)
{
    struct windrow_near_cursor cursor = cursor_at(kernel, values, 0, core_pages);
    for (uint32_t t = 0; t < kernel->block.target_count; t++) {
        sums[t] = next_sum(kernel, &cursor, wide, t);
        if (cursor.wrong)
            return false;
    }
    return true;
}

enum windrow_status windrow_kernel_sums(struct windrow_kernel *kernel, const double *values, uint64_t core_pages, double *sums)
{
    bool fine = is_wide(kernel) ? sums_of(kernel, values, core_pages, true, sums) : sums_of(kernel, values, core_pages, false, sums);
    return fine ? WINDROW_OK : damaged(kernel, "a source does not exist");
}

double windrow_kernel_runs_inside(const struct windrow_kernel *kernel, const double *values, uint64_t first, uint64_t end)
{
    bool wide = is_wide(kernel);
    double sum = 0;
    uint64_t run_end = 0;
    for (uint32_t i = 0; i < kernel->runs.count; i += 2) {
        uint64_t number = number_at(&kernel->runs, i, wide);
        uint64_t start = i == 0 ? kernel->block.run_base + unzigzag(number) : run_end + number;
        run_end = start + number_at(&kernel->runs, i + 1, wide) + WINDROW_RUN_LEAST;
        for (uint64_t id = start > first ? start : first; id < run_end && id < end; id++)
            sum += values[id];
    }
    return sum;
}

uint64_t windrow_kernel_links(const struct windrow_kernel *kernel, uint32_t target, uint32_t *run)
{
    bool wide = is_wide(kernel);
    uint64_t links = kernel->far_counts.count ? number_at(&kernel->far_counts, target, wide) : 0;
    if (kernel->near_counts.count)
        links += number_at(&kernel->near_counts, target, wide);
    for (uint64_t left = kernel->run_counts.count ? number_at(&kernel->run_counts, target, wide) : 0; left > 0; left--, *run += 2)
        links += number_at(&kernel->runs, *run + 1, wide) + WINDROW_RUN_LEAST;
    return links;
}
