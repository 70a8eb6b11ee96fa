#include "sweep/stream.h"

#include <stdlib.h>

/* A block read ahead, until a worker takes it. */
struct place {
    struct windrow_block_reader reader;
    struct windrow_block block;
};

struct windrow_streamer {
    const struct windrow_web *web;
    const struct windrow_web *read_web;                 /* that blocks are read from now */
    struct windrow_crew *crew;
    struct windrow_kernel *kernels;                     /* one a worker */
    struct place places[2][WINDROW_WAVE_BLOCKS_MOST];   /* this wave's and the next one's */

    /* The wave going on. */
    enum windrow_block_kind kind;
    const struct windrow_stream_job *job;
    uint64_t first;
    unsigned count, next_count;
    unsigned side;
};

enum windrow_status windrow_streamer_create(const struct windrow_web *web, struct windrow_crew *crew, struct windrow_streamer **streamer)
{
    *streamer = calloc(1, sizeof **streamer);
    struct windrow_kernel *kernels = calloc(windrow_crew_workers(crew), sizeof *kernels);
    if (!*streamer || !kernels) {
        free(*streamer);
        free(kernels);
        *streamer = NULL;
        return windrow_fail(WINDROW_RESOURCE, "out of memory while preparing to sweep");
    }
    (*streamer)->web = web;
    (*streamer)->crew = crew;
    (*streamer)->kernels = kernels;
    return WINDROW_OK;
}

void windrow_streamer_destroy(struct windrow_streamer *streamer)
{
    if (!streamer)
        return;
    for (unsigned worker = 0; worker < windrow_crew_workers(streamer->crew); worker++)
        windrow_kernel_free(&streamer->kernels[worker]);
    for (int side = 0; side < 2; side++)
        for (int i = 0; i < WINDROW_WAVE_BLOCKS_MOST; i++)
            windrow_block_reader_free(&streamer->places[side][i].reader);
    free(streamer->kernels);
    free(streamer);
}

unsigned windrow_streamer_wave_blocks(const struct windrow_streamer *streamer, enum windrow_block_kind kind)
{
    uint64_t quarter = streamer->web->block_count[kind] / 4;
    return quarter < 1 ? 1 : quarter > WINDROW_WAVE_BLOCKS_MOST ? WINDROW_WAVE_BLOCKS_MOST : (unsigned)quarter;
}

static enum windrow_status read_place(struct windrow_streamer *streamer, uint64_t block, struct place *place)
{
    return streamer->read_web->read(streamer->read_web->context, streamer->kind, block, &place->reader, &place->block);
}

static enum windrow_status read_task(void *context, uint64_t task, unsigned worker)
{
    struct windrow_streamer *streamer = context;
    (void)worker;
    return read_place(streamer, streamer->first + task, &streamer->places[streamer->side][task]);
}

/* First the wave's blocks are worked on, then the next wave's are read. */
static enum windrow_status wave_task(void *context, uint64_t task, unsigned worker)
{
    struct windrow_streamer *streamer = context;
    if (task >= streamer->count) {
        unsigned ahead = (unsigned)(task - streamer->count);
        return read_place(streamer, streamer->first + task, &streamer->places[streamer->side ^ 1][ahead]);
    }
    uint64_t block = streamer->first + task;
    struct windrow_kernel *kernel = &streamer->kernels[worker];
    enum windrow_status status = windrow_kernel_load(kernel, &streamer->places[streamer->side][task].block,
                                                     streamer->read_web->record(streamer->read_web->context, streamer->kind, block));
    return status ? status : streamer->job->work(streamer->job->context, block, (unsigned)task, kernel, worker);
}

enum windrow_status windrow_streamer_run(struct windrow_streamer *streamer, enum windrow_block_kind kind, uint64_t first,
                                         const struct windrow_stream_job *job)
{
    return windrow_streamer_run_part(streamer, streamer->web, kind, first, streamer->web->block_count[kind], job);
}

enum windrow_status windrow_streamer_run_part(struct windrow_streamer *streamer, const struct windrow_web *web, enum windrow_block_kind kind,
                                              uint64_t first, uint64_t end, const struct windrow_stream_job *job)
{
    unsigned most = windrow_streamer_wave_blocks(streamer, kind);
    if (first >= end)
        return WINDROW_OK;
    streamer->read_web = web;
    streamer->kind = kind;
    streamer->job = job;
    streamer->first = first;
    streamer->count = end - first < most ? (unsigned)(end - first) : most;
    enum windrow_status status = windrow_crew_run(streamer->crew, streamer->count, read_task, streamer);
    while (!status) {
        uint64_t next = streamer->first + streamer->count;
        streamer->next_count = end - next < most ? (unsigned)(end - next) : most;
        status = windrow_crew_run(streamer->crew, (uint64_t)streamer->count + streamer->next_count, wave_task, streamer);
        if (!status)
            status = job->barrier(job->context, streamer->first, next);
        if (next == end)
            break;
        streamer->first = next;
        streamer->count = streamer->next_count;
        streamer->side ^= 1;
    }
    return status;
}
