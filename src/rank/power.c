/* Plain power iteration over all links: x' = ((1-beta) + beta delta) v + beta P^T x, where delta is the mass
 * of the dangling pages. Kept so that others can be held against it.
 *
 * Between sweeps the vector is scaled to what the solver's other parts expect, the y of the linear system,
 * whose dangling pages hand nothing around: x times (1-beta) / ((1-beta) + beta delta).
 */
#include "rank/solver.h"

#include "rank/solver_private.h"

#include <math.h>
#include <stdlib.h>

struct power {
    struct windrow_solver *solver;
    double *core, *rim;      /* x' */
    double total, change;    /* of the kind of block going on */
    double jump_factor;      /* (1-beta) v becomes what every page gets, by this */
    double sum_factor;       /* beta, and x instead of y */
    enum windrow_block_kind kind;
    double piece_sum;
    bool piece_open;
};

static void settle(struct power *power, uint64_t page, double sum)
{
    struct windrow_solver *solver = power->solver;
    bool core = power->kind == WINDROW_BLOCK_CORE;
    double jump = core ? windrow_solver_jump(solver, page) : windrow_solver_rim_jump(solver, page);
    (core ? power->core : power->rim)[page] = power->jump_factor * jump + power->sum_factor * sum;
}

static enum windrow_status power_block(void *context, uint64_t block, unsigned index, struct windrow_kernel *kernel, unsigned worker)
{
    (void)block;
    (void)worker;
    struct power *power = context;
    struct windrow_solver *solver = power->solver;
    uint64_t core_pages = solver->options.web->core_pages;
    struct windrow_solver_slot *slot = &solver->own->slots[index];
    enum windrow_status status = windrow_solver_slot_room(slot, kernel->record->target_count);
    if (!status)
        status = windrow_kernel_gather(kernel, solver->values, core_pages, NULL);
    if (status)
        return status;
    double *sums = windrow_solver_slot_values(slot);
    if ((status = windrow_kernel_sums(kernel, solver->values, core_pages, sums)))
        return status;
    slot->piece_sum = sums[0];
    for (uint32_t t = 0; t < kernel->record->target_count && !(kernel->record->flags & WINDROW_BLOCK_PIECE); t++)
        settle(power, kernel->record->first_target + t, sums[t]);
    return WINDROW_OK;
}

static enum windrow_status power_barrier(void *context, uint64_t first, uint64_t end)
{
    struct power *power = context;
    const struct windrow_web *web = power->solver->options.web;
    for (uint64_t block = first; block < end; block++) {
        const struct windrow_block_record *record = web->record(web->context, power->kind, block);
        if (!(record->flags & WINDROW_BLOCK_PIECE))
            continue;
        power->piece_sum = (power->piece_open ? power->piece_sum : 0) + power->solver->own->slots[block - first].piece_sum;
        power->piece_open = !(record->flags & WINDROW_BLOCK_LAST_PIECE);
        if (!power->piece_open)
            settle(power, record->first_target, power->piece_sum);
    }
    windrow_solver_count_links(power->solver, power->kind, first, end);
    return windrow_solver_stop_asked(power->solver);
}

enum windrow_status windrow_solver_power_sweep(struct windrow_solver *solver)
{
    const struct windrow_web *web = solver->options.web;
    struct windrow_solver_state *state = &solver->state;
    uint64_t core_pages = web->core_pages, rim_pages = web->pages - core_pages;
    double beta = solver->options.beta;
    /* At the start the vector is v itself. */
    if (state->sweeps == 0) {
        state->dangling = 0;
        for (uint64_t i = 0; i < rim_pages; i++)
            state->dangling += solver->rim[i] = windrow_solver_rim_jump(solver, i) / (1 - beta);
    }
    double share = (1 - beta) + beta * state->dangling, to_x = state->sweeps ? share / (1 - beta) : 1;
    struct power power = {.solver = solver, .jump_factor = share / (1 - beta), .sum_factor = beta * to_x};
    power.core = malloc((core_pages + 1) * sizeof(double));
    power.rim = malloc((rim_pages + 1) * sizeof(double));
    const struct windrow_stream_job job = {.context = &power, .work = power_block, .barrier = power_barrier};
    enum windrow_status status = power.core && power.rim ? WINDROW_OK : windrow_fail(WINDROW_RESOURCE, "out of memory for power iteration");
    for (int kind = 0; !status && kind < WINDROW_BLOCK_KINDS; kind++) {
        power.kind = kind;
        status = windrow_streamer_run(solver->own->streamer, power.kind, 0, &job);
    }
    if (status)
        goto out;
    double change = 0, dangling = 0;
    for (uint64_t i = 0; i < rim_pages; i++) {
        change += fabs(power.rim[i] - solver->rim[i] * to_x);
        dangling += power.rim[i];
    }
    double to_y = (1 - beta) / ((1 - beta) + beta * dangling);
    state->change_relative = 0;
    for (uint64_t i = 0; i < core_pages; i++) {
        double before = solver->values[i] * web->degrees[i] * to_x, size = fabs(power.core[i] - before);
        change += size;
        if (size > state->change_relative * power.core[i])
            state->change_relative = size / power.core[i];
        solver->values[i] = power.core[i] / web->degrees[i] * to_y;
    }
    for (uint64_t i = 0; i < rim_pages; i++)
        solver->rim[i] = power.rim[i] * to_y;
    state->dangling = dangling;
    state->sweeps++;
    windrow_solver_remember_change(solver, change);
out:
    free(power.core);
    free(power.rim);
    return status;
}
