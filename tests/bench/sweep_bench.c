/* sweep_bench: what a visit of a link costs, and where the time goes.
 *
 *     sweep_bench STORE [ROUNDS [THREADS…]]
 *
 * Sweeps over the core of a store in the page cache, as `windrow rank` makes them, against gathering from an
 * uncompressed array of 32-bit ids in memory with the same threads; then the sweep's parts. Everything is
 * measured once a round, one after another, so that a busy machine disturbs all alike; medians and least
 * times over the rounds (5). Both sides keep their vectors in large pages, and the array is the faster of
 * two loops: one sum a target, and four lanes.
 */
#include "bench.h"

#include "base/meter.h"
#include "rank/solver.h"

#include <stdio.h>
#include <stdlib.h>
#include <zstd.h>

/* ---- The line to beat: an array in memory ---------------------------------------------------- */

enum { THREADS_MOST = 64 };

struct array {
    struct bench_links links;
    double *values, *sums;
    uint64_t bounds[THREADS_MOST + 1]; /* targets of each thread: as many links each */
    bool lanes;
};

static void cut(struct array *array, unsigned threads)
{
    const struct bench_links *links = &array->links;
    uint64_t target = 0;
    for (unsigned i = 0; i < threads; i++) {
        array->bounds[i] = target;
        while (target < links->targets && links->starts[target] < links->starts[links->targets] / threads * (i + 1))
            target++;
    }
    array->bounds[threads] = links->targets;
}

static enum windrow_status gather_task(void *context, uint64_t task, unsigned worker)
{
    (void)worker;
    struct array *array = context;
    const uint64_t *starts = array->links.starts;
    const uint32_t *sources = array->links.sources;
    const double *values = array->values;
    for (uint64_t target = array->bounds[task]; target < array->bounds[task + 1]; target++) {
        double sum = 0;
        for (uint64_t i = starts[target]; i < starts[target + 1]; i++)
            sum += values[sources[i]];
        array->sums[target] = sum;
    }
    return WINDROW_OK;
}

static enum windrow_status gather_lanes_task(void *context, uint64_t task, unsigned worker)
{
    (void)worker;
    struct array *array = context;
    const uint64_t *starts = array->links.starts;
    const uint32_t *sources = array->links.sources;
    const double *values = array->values;
    for (uint64_t target = array->bounds[task]; target < array->bounds[task + 1]; target++) {
        double lanes[4] = {0};
        uint64_t i = starts[target], end = starts[target + 1];
        for (; i + 4 <= end; i += 4) {
            lanes[0] += values[sources[i]];
            lanes[1] += values[sources[i + 1]];
            lanes[2] += values[sources[i + 2]];
            lanes[3] += values[sources[i + 3]];
        }
        for (; i < end; i++)
            lanes[0] += values[sources[i]];
        array->sums[target] = (lanes[0] + lanes[1]) + (lanes[2] + lanes[3]);
    }
    return WINDROW_OK;
}

/* ---- Parts of a sweep ------------------------------------------------------------------------ */

struct frames {
    uint64_t count;
    const struct bench_store *store;
    uint8_t **data;
    struct windrow_buffer *payloads;  /* one a worker */
    ZSTD_DCtx **decompressors;
};

static struct frames frames_load(const struct bench_store *store)
{
    struct frames frames = {
        .count = store->web.block_count[WINDROW_BLOCK_CORE],
        .store = store,
        .data = bench_memory(store->web.block_count[WINDROW_BLOCK_CORE], sizeof *frames.data),
        .payloads = bench_memory(THREADS_MOST, sizeof *frames.payloads),
        .decompressors = bench_memory(THREADS_MOST, sizeof *frames.decompressors),
    };
    struct windrow_block_reader reader = {0};
    for (uint64_t i = 0; i < frames.count; i++) {
        struct windrow_block block;
        bench_expect(windrow_store_block_read(store->store, WINDROW_BLOCK_CORE, i, &reader, &block), store->path);
        frames.data[i] = reader.frame.data;
        reader.frame = (struct windrow_buffer){0}; /* ours now */
    }
    windrow_block_reader_free(&reader);
    for (unsigned i = 0; i < THREADS_MOST; i++)
        frames.decompressors[i] = ZSTD_createDCtx();
    return frames;
}

static enum windrow_status decompress_task(void *context, uint64_t task, unsigned worker)
{
    struct frames *frames = context;
    const struct windrow_block_record *record = windrow_store_block_record(frames->store->store, WINDROW_BLOCK_CORE, task);
    struct windrow_buffer *payload = &frames->payloads[worker];
    payload->bytes = 0;
    enum windrow_status status = windrow_buffer_reserve(payload, record->payload_bytes);
    if (!status && ZSTD_decompressDCtx(frames->decompressors[worker], payload->data, record->payload_bytes, frames->data[task],
                                       record->frame_bytes) != record->payload_bytes)
        status = windrow_fail(WINDROW_DAMAGED, "block %llu does not decompress", (unsigned long long)task);
    return status;
}

enum depth { READ, GATHER, SUMS, DEPTHS };

struct part {
    enum depth depth;
    const struct bench_store *store;
    const double *values;
    double *sums;
};

static enum windrow_status part_work(void *context, uint64_t block, unsigned slot, struct windrow_kernel *kernel, unsigned worker)
{
    (void)slot, (void)worker;
    struct part *part = context;
    enum windrow_status status = WINDROW_OK;
    if (part->depth >= GATHER)
        status = windrow_kernel_gather(kernel, part->values, part->store->web.core_pages, NULL);
    if (!status && part->depth >= SUMS && !(kernel->record->flags & WINDROW_BLOCK_PIECE))
        status = windrow_kernel_sums(kernel, part->values, part->store->web.core_pages,
                                     part->sums + windrow_store_block_record(part->store->store, WINDROW_BLOCK_CORE, block)->first_target);
    return status;
}

static enum windrow_status part_barrier(void *context, uint64_t first, uint64_t end)
{
    (void)context, (void)first, (void)end;
    return WINDROW_OK;
}

/* ---- All together ---------------------------------------------------------------------------- */

enum row { PLAIN_ARRAY, LANES_ARRAY, GAUSS_SEIDEL, BALANCED, MIXED, ZSTD, PARTS, ROWS = PARTS + DEPTHS };

static const char *const row_names[ROWS] = {
    "array in memory, one sum a target",
    "array in memory, four lanes",
    "sweep: Gauss-Seidel",
    "sweep: and host balance",
    "sweep: and mixing, as rank does",
    "part: zstd alone, frames in memory",
    "part: read, check, zstd, decode",
    "part: and gather far sources",
    "part: and near sources and runs",
};

struct measured {
    struct bench_times times[ROWS]; /* seconds a link visited */
};

static double solver_seconds_a_link(struct windrow_solver *solver)
{
    uint64_t visits = solver->state.link_visits;
    double began = windrow_seconds();
    bench_expect(windrow_solver_sweep(solver), "sweep");
    return (windrow_seconds() - began) / (double)(solver->state.link_visits - visits);
}

static void measure(const struct bench_store *store, struct array *array, struct frames *frames, unsigned threads, unsigned rounds,
                    struct measured *measured)
{
    struct windrow_crew *crew;
    struct windrow_streamer *streamer;
    struct windrow_solver *solvers[3];
    double links = (double)store->web.links[WINDROW_BLOCK_CORE];
    bench_expect(windrow_crew_create(threads, &crew), "threads");
    bench_expect(windrow_streamer_create(&store->web, crew, &streamer), "streamer");
    for (int i = 0; i < 3; i++) {
        const struct windrow_solver_options options = {
            .web = &store->web, .crew = crew, .method = WINDROW_METHOD_MIXED, .beta = 0.85,
            .without_balance = i < 1, .without_mixing = i < 2, .without_inner_passes = true,
        };
        bench_expect(windrow_solver_create(&options, &solvers[i]), "solver");
        /* Until the mixing has all of its columns. */
        for (int warm = 0; warm <= WINDROW_MIXING_COLUMNS; warm++)
            solver_seconds_a_link(solvers[i]);
    }
    cut(array, threads);
    for (unsigned round = 0; round < rounds; round++) {
        for (int lanes = 0; lanes < 2; lanes++) {
            double began = windrow_seconds();
            bench_expect(windrow_crew_run(crew, threads, lanes ? gather_lanes_task : gather_task, array), "gather");
            bench_times_add(&measured->times[PLAIN_ARRAY + lanes], (windrow_seconds() - began) / links);
        }
        for (int i = 0; i < 3; i++)
            bench_times_add(&measured->times[GAUSS_SEIDEL + i], solver_seconds_a_link(solvers[i]));
        double began = windrow_seconds();
        bench_expect(windrow_crew_run(crew, frames->count, decompress_task, frames), "zstd");
        bench_times_add(&measured->times[ZSTD], (windrow_seconds() - began) / links);
        for (unsigned depth = 0; depth < DEPTHS; depth++) {
            struct part part = {.depth = depth, .store = store, .values = array->values, .sums = array->sums};
            const struct windrow_stream_job job = {.context = &part, .work = part_work, .barrier = part_barrier};
            began = windrow_seconds();
            bench_expect(windrow_streamer_run(streamer, WINDROW_BLOCK_CORE, 0, &job), "streaming");
            bench_times_add(&measured->times[PARTS + depth], (windrow_seconds() - began) / links);
        }
    }
    for (int i = 0; i < 3; i++)
        windrow_solver_destroy(solvers[i]);
    windrow_streamer_destroy(streamer);
    windrow_crew_destroy(crew);
}

static double faster_array(const struct measured *measured)
{
    double plain = bench_times_median(&measured->times[PLAIN_ARRAY]), lanes = bench_times_median(&measured->times[LANES_ARRAY]);
    return plain < lanes ? plain : lanes;
}

int main(int argc, char **argv)
{
    if (argc < 2)
        bench_usage("sweep_bench STORE [ROUNDS [THREADS...]]");
    unsigned rounds = argc > 2 ? (unsigned)strtoul(argv[2], NULL, 10) : 5;
    unsigned threads[8] = {1, 2}, counts = 2;
    if (argc > 3)
        for (counts = 0; counts < 8 && (int)counts + 3 < argc; counts++)
            threads[counts] = (unsigned)strtoul(argv[3 + counts], NULL, 10);
    if (rounds < 1 || rounds > BENCH_ROUNDS_MOST)
        bench_usage("ROUNDS is 1 to 64");
    for (unsigned i = 0; i < counts; i++)
        if (threads[i] < 1 || threads[i] > THREADS_MOST)
            bench_usage("THREADS is 1 to 64");
    struct bench_store store = bench_store_open(argv[1]);
    uint64_t core = store.web.core_pages;
    struct array array = {
        .links = bench_links_load(&store, WINDROW_BLOCK_CORE),
        .values = bench_memory(core, sizeof(double)),
        .sums = bench_memory(core, sizeof(double)),
    };
    for (uint64_t i = 0; i < core; i++)
        array.values[i] = 1.0 / (double)core / store.web.degrees[i];
    struct frames frames = frames_load(&store);
    struct measured measured[8] = {0};
    for (unsigned i = 0; i < counts; i++)
        measure(&store, &array, &frames, threads[i], rounds, &measured[i]);

    printf("core: %llu pages (a vector takes %.1f MiB), %llu links in %llu blocks; %u rounds; ns a link: median (least)\n",
           (unsigned long long)core, (double)core * 8 / 1048576, (unsigned long long)store.web.links[WINDROW_BLOCK_CORE],
           (unsigned long long)store.web.block_count[WINDROW_BLOCK_CORE], rounds);
    printf("%-36s", "");
    for (unsigned i = 0; i < counts; i++)
        printf("  %4u thread%s  x array", threads[i], threads[i] == 1 ? " " : "s");
    if (counts > 1)
        printf("  speed-up (of least)");
    putchar('\n');
    for (unsigned row = 0; row < ROWS; row++) {
        printf("%-36s", row_names[row]);
        for (unsigned i = 0; i < counts; i++) {
            double median = bench_times_median(&measured[i].times[row]);
            printf("  %5.2f (%4.2f)  %7.2f", median * 1e9, bench_times_least(&measured[i].times[row]) * 1e9, median / faster_array(&measured[i]));
        }
        if (counts > 1)
            printf("  %8.2f (%.2f)", bench_times_median(&measured[0].times[row]) / bench_times_median(&measured[counts - 1].times[row]),
                   bench_times_least(&measured[0].times[row]) / bench_times_least(&measured[counts - 1].times[row]));
        putchar('\n');
    }
    windrow_store_close(store.store);
    return 0;
}
