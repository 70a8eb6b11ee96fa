/* What the solver's files share among themselves: sweeps (solver.c), what flows in from other stripes (inflow.c),
 * plain power iteration (power.c), and the certifying passes (certify.c). Nobody else includes this. */
#ifndef WINDROW_RANK_SOLVER_PRIVATE_H
#define WINDROW_RANK_SOLVER_PRIVATE_H

#include "rank/solver.h"

/* What a worker leaves behind about one block of a wave, until the barrier. */
struct windrow_solver_slot {
    struct windrow_buffer values;     /* one double a target */
    struct windrow_own own[2];        /* hosts that reach out of the block */
    double inflow[2], kept[2];        /* their mass equations' two sides, over this block's targets */
    double piece_sum, piece_own;
    uint64_t inner_links;             /* visited again by passes inside a host */
    double sum, rounding;             /* certifying: of |q|, or of y, over the block; and what of it is rounding */
};

struct windrow_solver_private {
    struct windrow_streamer *streamer;
    struct windrow_solver_slot slots[WINDROW_WAVE_BLOCKS_MOST];
    struct windrow_class_table *tables;   /* one a worker */
    uint64_t *first_hosts;                /* host of each core block's first target */
    void *memory;
    uint64_t memory_bytes;
    unsigned workers;
    uint64_t wave_first;
    uint64_t inner_links_most;            /* near links of a host that may get more passes: larger ones are the sweep itself */
    double worth;                         /* change on a near link that makes another pass inside a host pay */
    const struct windrow_web *passing;    /* the web whose blocks are streamed now: the options' own, or one of the tiles' */
    double *stripe_sums;                  /* room for one double a page of the largest stripe */
    double *inflow;                       /* what flows in from other stripes, from the page (or rim page) inflow_first on */
    uint64_t inflow_first;
    bool certifying;
    /* Certifying. */
    double total, total_error, rounding;  /* sums over the blocks so far, compensated */
    uint64_t piece_links;
};

/* (1 - beta) v of a core page, and of a dangling one. */
static inline double windrow_solver_jump(const struct windrow_solver *solver, uint64_t core)
{
    const double *jumps = solver->options.core_jump;
    return (1 - solver->options.beta) * (jumps ? jumps[core] : 1 / (double)solver->options.web->pages);
}

static inline double windrow_solver_rim_jump(const struct windrow_solver *solver, uint64_t rim)
{
    const double *jumps = solver->options.rim_jump;
    return (1 - solver->options.beta) * (jumps ? jumps[rim] : 1 / (double)solver->options.web->pages);
}

static inline bool windrow_solver_balances(const struct windrow_solver *solver)
{
    return !solver->options.without_balance && solver->state.guard < WINDROW_GUARD_NO_BALANCE;
}

static inline enum windrow_status windrow_solver_slot_room(struct windrow_solver_slot *slot, uint32_t targets)
{
    slot->values.bytes = 0;
    return windrow_buffer_reserve(&slot->values, (size_t)targets * sizeof(double));
}

static inline double *windrow_solver_slot_values(const struct windrow_solver_slot *slot)
{
    return (double *)(void *)slot->values.data;
}

/* Counts the links of the blocks [first, end), which were just streamed, as visited. */
static inline void windrow_solver_count_links(struct windrow_solver *solver, enum windrow_block_kind kind, uint64_t first, uint64_t end)
{
    const struct windrow_web *web = solver->own->passing;
    uint64_t links = 0;
    for (uint64_t block = first; block < end; block++)
        links += web->record(web->context, kind, block)->link_count;
    solver->state.link_visits += links;
    if (solver->options.meter)
        windrow_meter_add(solver->options.meter, links);
}

/* WINDROW_STOPPED when somebody asked for it: passes that are done again from their beginning just end. */
static inline enum windrow_status windrow_solver_stop_asked(const struct windrow_solver *solver)
{
    if (solver->options.meter && windrow_meter_stopping(solver->options.meter))
        return windrow_fail(WINDROW_STOPPED, "stopped; run the same command again to go on");
    return WINDROW_OK;
}

/* Streams blocks of the web, or of a web of the tiles. */
static inline enum windrow_status windrow_solver_stream(struct windrow_solver *solver, const struct windrow_web *web, enum windrow_block_kind kind,
                                                        uint64_t first, uint64_t end, const struct windrow_stream_job *job)
{
    solver->own->passing = web;
    return windrow_streamer_run_part(solver->own->streamer, web, kind, first, end, job);
}

/* What flows into a core page of the stripe at work from other stripes. */
static inline double windrow_solver_inflow(const struct windrow_solver *solver, uint64_t page)
{
    const struct windrow_solver_private *own = solver->own;
    return own->inflow ? own->inflow[page - own->inflow_first] : 0;
}

/* Streams the core's blocks from `first` on, stripe by stripe where there are tiles. */
enum windrow_status windrow_solver_stream_core(struct windrow_solver *solver, uint64_t first, const struct windrow_stream_job *job);
/* With tiles: fills the vector of the rim with the sums over in-links. */
enum windrow_status windrow_solver_sum_rim(struct windrow_solver *solver);
/* Lets go of core pages in all vectors; for mixing, too. */
void windrow_solver_release_pages(const void *solver, uint64_t first, uint64_t end);
void windrow_solver_remember_change(struct windrow_solver *solver, double change);
enum windrow_status windrow_solver_power_sweep(struct windrow_solver *solver);

#endif
