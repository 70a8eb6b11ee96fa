/* Streaming by stripes: what flows in from the other stripes, and vectors of which little is in memory.
 *
 * The vectors' file is mapped as a whole. What is let go of leaves the process's memory and stays in the file (and, while the
 * system has room, in its cache); what is looked at comes back. So which part of a vector is in memory follows from the
 * order of work alone.
 *
 * Sums: parts are added in the order of their stripes, pieces of a list in block order, each addition rounded: certify.c
 * counts these roundings.
 */
#include "rank/solver.h"

#include "rank/solver_private.h"

#include <string.h>
#include <sys/mman.h>
#include <unistd.h>

void windrow_solver_release(const struct windrow_solver *solver, const void *memory, uint64_t bytes)
{
    if (!solver->options.tiles || bytes == 0)
        return;
    /* Memory pages at the ends are let go of whole. */
    uintptr_t page = (uintptr_t)sysconf(_SC_PAGESIZE), first = (uintptr_t)memory / page * page, end = ((uintptr_t)memory + bytes + page - 1) / page * page;
    madvise((void *)first, end - first, MADV_DONTNEED);
}

static void release_degrees(const struct windrow_solver *solver, uint64_t first, uint64_t end)
{
    const struct windrow_web *web = solver->options.web;
    if (!web->release || first >= end)
        return;
    web->release(web->degrees + first, (end - first) * sizeof *web->degrees);
    web->release(web->inside_degrees + first, (end - first) * sizeof *web->inside_degrees);
}

void windrow_solver_release_pages(const void *context, uint64_t first, uint64_t end)
{
    const struct windrow_solver *solver = context;
    if (!solver->options.tiles)
        return;
    uint64_t count = end - first;
    windrow_solver_release(solver, solver->values + first, count * sizeof *solver->values);
    windrow_solver_release(solver, solver->mixing.change + first, count * sizeof *solver->mixing.change);
    for (int c = 0; c < WINDROW_MIXING_COLUMNS; c++) {
        windrow_solver_release(solver, solver->mixing.change_columns[c] + first, count * sizeof(float));
        windrow_solver_release(solver, solver->mixing.value_columns[c] + first, count * sizeof(float));
    }
    release_degrees(solver, first, end);
}

void windrow_solver_release_all(const struct windrow_solver *solver)
{
    if (!solver->options.tiles)
        return;
    windrow_solver_release(solver, solver->own->memory, solver->own->memory_bytes);
    release_degrees(solver, 0, solver->options.web->core_pages);
}

/* ---- Sums over a column of tiles ----------------------------------------------------------- */

static enum windrow_status add_block(void *context, uint64_t block, unsigned index, struct windrow_kernel *kernel, unsigned worker)
{
    (void)block;
    (void)worker;
    struct windrow_solver *solver = context;
    const struct windrow_block_record *record = kernel->record;
    struct windrow_solver_slot *slot = &solver->own->slots[index];
    uint64_t core_pages = solver->options.web->core_pages;
    slot->piece_sum = 0;
    if (record->link_count == 0)
        return WINDROW_OK;
    enum windrow_status status = windrow_solver_slot_room(slot, record->target_count);
    if (!status)
        status = windrow_kernel_gather(kernel, solver->values, core_pages, NULL);
    if (status)
        return status;
    double *sums = windrow_solver_slot_values(slot);
    if ((status = windrow_kernel_sums(kernel, solver->values, core_pages, sums)))
        return status;
    slot->piece_sum = sums[0];
    /* Pieces of one list may be at work at the same time: they are added at the barrier. */
    double *inflow = solver->own->inflow + (record->first_target - solver->own->inflow_first);
    for (uint32_t t = 0; t < record->target_count && !(record->flags & WINDROW_BLOCK_PIECE); t++)
        inflow[t] += sums[t];
    return WINDROW_OK;
}

static void settle_pieces(struct windrow_solver *solver, enum windrow_block_kind kind, uint64_t first, uint64_t end)
{
    const struct windrow_web *web = solver->own->passing;
    for (uint64_t block = first; block < end; block++) {
        const struct windrow_block_record *record = web->record(web->context, kind, block);
        if (record->flags & WINDROW_BLOCK_PIECE)
            solver->own->inflow[record->first_target - solver->own->inflow_first] += solver->own->slots[block - first].piece_sum;
    }
    windrow_solver_count_links(solver, kind, first, end);
}

static enum windrow_status core_barrier(void *context, uint64_t first, uint64_t end)
{
    struct windrow_solver *solver = context;
    settle_pieces(solver, WINDROW_BLOCK_CORE, first, end);
    if (solver->own->certifying)
        return windrow_solver_stop_asked(solver);
    /* These sums are no part of the saved state: they are made again from the same values. A sweep that has changed nothing yet
     * cannot be told from one that has not begun, and is not stopped here. */
    return solver->state.next_block && solver->options.pause ? solver->options.pause(solver->options.pause_context) : WINDROW_OK;
}

static enum windrow_status rim_barrier(void *context, uint64_t first, uint64_t end)
{
    struct windrow_solver *solver = context;
    const struct windrow_web *web = solver->own->passing;
    settle_pieces(solver, WINDROW_BLOCK_RIM, first, end);
    const struct windrow_block_record *front = web->record(web->context, WINDROW_BLOCK_RIM, first);
    const struct windrow_block_record *back = web->record(web->context, WINDROW_BLOCK_RIM, end - 1);
    windrow_solver_release(solver, solver->rim + front->first_target, (back->first_target + back->target_count - front->first_target) * sizeof *solver->rim);
    return windrow_solver_stop_asked(solver);
}

/* Adds what the sources of a stripe pass on to the targets of the blocks [first, end). */
static enum windrow_status add_column(struct windrow_solver *solver, unsigned stripe, enum windrow_block_kind kind, uint64_t first, uint64_t end,
                                      const struct windrow_stream_job *job)
{
    const struct windrow_tiles *tiles = solver->options.tiles;
    uint64_t first_page = tiles->stripes.first_page[stripe], pages = tiles->stripes.first_page[stripe + 1] - first_page;
    const double *values = solver->values + first_page;
    uintptr_t page = (uintptr_t)sysconf(_SC_PAGESIZE), from = (uintptr_t)values / page * page;
    if (pages)
        madvise((void *)from, (uintptr_t)(values + pages) - from, MADV_WILLNEED);
    enum windrow_status status = windrow_solver_stream(solver, &tiles->columns[stripe], kind, first, end, job);
    windrow_solver_release(solver, values, pages * sizeof *values);
    return status;
}

static enum windrow_status sum_inflow(struct windrow_solver *solver, unsigned stripe)
{
    const struct windrow_stream_job job = {.context = solver, .work = add_block, .barrier = core_barrier};
    const struct windrow_stripes *stripes = &solver->options.tiles->stripes;
    struct windrow_solver_private *own = solver->own;
    own->inflow = own->stripe_sums;
    own->inflow_first = stripes->first_page[stripe];
    memset(own->inflow, 0, (stripes->first_page[stripe + 1] - own->inflow_first) * sizeof *own->inflow);
    enum windrow_status status = WINDROW_OK;
    for (unsigned source = 0; !status && source < stripes->count; source++)
        if (source != stripe)
            status = add_column(solver, source, WINDROW_BLOCK_CORE, stripes->first_block[stripe], stripes->first_block[stripe + 1], &job);
    return status;
}

enum windrow_status windrow_solver_stream_core(struct windrow_solver *solver, uint64_t first, const struct windrow_stream_job *job)
{
    const struct windrow_tiles *tiles = solver->options.tiles;
    const struct windrow_web *web = solver->options.web;
    if (!tiles)
        return windrow_solver_stream(solver, web, WINDROW_BLOCK_CORE, first, web->block_count[WINDROW_BLOCK_CORE], job);
    const struct windrow_stripes *stripes = &tiles->stripes;
    enum windrow_status status = WINDROW_OK;
    for (unsigned stripe = 0; !status && stripe < stripes->count; stripe++) {
        uint64_t end = stripes->first_block[stripe + 1];
        if (first >= end)
            continue;
        if ((status = sum_inflow(solver, stripe)))
            break;
        status = windrow_solver_stream(solver, &tiles->diagonal, WINDROW_BLOCK_CORE, first, end, job);
        first = end;
        windrow_solver_release_pages(solver, stripes->first_page[stripe], stripes->first_page[stripe + 1]);
    }
    solver->own->inflow = NULL;
    return status;
}

/* ---- The rim ------------------------------------------------------------------------------- */

static enum windrow_status clear_task(void *context, uint64_t chunk, unsigned worker)
{
    (void)worker;
    struct windrow_solver *solver = context;
    uint64_t rim_pages = solver->options.web->pages - solver->options.web->core_pages;
    uint64_t first = chunk * WINDROW_MIXING_CHUNK, end = first + WINDROW_MIXING_CHUNK < rim_pages ? first + WINDROW_MIXING_CHUNK : rim_pages;
    memset(solver->rim + first, 0, (end - first) * sizeof *solver->rim);
    windrow_solver_release(solver, solver->rim + first, (end - first) * sizeof *solver->rim);
    return WINDROW_OK;
}

enum windrow_status windrow_solver_sum_rim(struct windrow_solver *solver)
{
    const struct windrow_stream_job job = {.context = solver, .work = add_block, .barrier = rim_barrier};
    const struct windrow_web *web = solver->options.web;
    uint64_t rim_pages = web->pages - web->core_pages;
    enum windrow_status status = windrow_crew_run(solver->options.crew, (rim_pages + WINDROW_MIXING_CHUNK - 1) / WINDROW_MIXING_CHUNK, clear_task, solver);
    solver->own->inflow = solver->rim;
    solver->own->inflow_first = 0;
    for (unsigned stripe = 0; !status && stripe < solver->options.tiles->stripes.count; stripe++)
        status = add_column(solver, stripe, WINDROW_BLOCK_RIM, 0, web->block_count[WINDROW_BLOCK_RIM], &job);
    solver->own->inflow = NULL;
    return status;
}
