#include "rank/solver.h"

#include "rank/solver_private.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>

/* Updates of a host again in a sweep, at most; and how many times the average change on a link one must bring. */
enum { INNER_PASSES_MOST = 8, INNER_FROM = 3 };
static const double WORTH = 2;

/* ---- Making -------------------------------------------------------------------------------- */

static uint64_t rim_pages(const struct windrow_web *web)
{
    return web->pages - web->core_pages;
}

static uint64_t rounded(uint64_t bytes)
{
    return (bytes + 4095) / 4096 * 4096;
}

static uint64_t vector_bytes(const struct windrow_web *web)
{
    return rounded(web->core_pages * sizeof(double)) + rounded(rim_pages(web) * sizeof(double)) +
           (1 + 2 * WINDROW_MIXING_COLUMNS) * rounded(web->core_pages * sizeof(float)) +
           rounded(web->host_count) + rounded(web->block_count[WINDROW_BLOCK_CORE]);
}

uint64_t windrow_solver_memory_bytes(const struct windrow_web *web)
{
    return vector_bytes(web) + web->block_count[WINDROW_BLOCK_CORE] * sizeof(uint64_t);
}

/* Of each page of the stripe that is swept: its value, its change, both degrees, and what flows in. */
enum { STRIPE_PAGE_BYTES = 8 + 4 + 8 + 8 };

uint64_t windrow_solver_stripe_bytes(const struct windrow_web *web, const struct windrow_stripes *stripes)
{
    return windrow_stripes_pages_most(stripes) * STRIPE_PAGE_BYTES + web->host_count + web->block_count[WINDROW_BLOCK_CORE] * (1 + sizeof(uint64_t));
}

/* Anonymous memory in large pages where the system has them: most of a sweep's misses are of addresses. */
static void *vector_take(uint8_t **memory, uint64_t bytes)
{
    void *vector = *memory;
    *memory += rounded(bytes);
    return vector;
}

/* The vectors' memory: of the process alone, or of the scratch file, whose space is reserved before it is mapped. */
static enum windrow_status take_memory(struct windrow_solver *solver)
{
    struct windrow_solver_private *own = solver->own;
    const struct windrow_tiles *tiles = solver->options.tiles;
    if (tiles && own->memory_bytes) {
        int error_number = windrow_files.reserve(solver->options.scratch, 0, (off_t)own->memory_bytes);
        if (error_number)
            return windrow_fail_system(WINDROW_RESOURCE, error_number, "cannot reserve %llu bytes of disk for the vectors of this ranking",
                                       (unsigned long long)own->memory_bytes);
    }
    if (own->memory_bytes) {
        own->memory = mmap(NULL, own->memory_bytes, PROT_READ | PROT_WRITE, tiles ? MAP_SHARED : MAP_PRIVATE | MAP_ANONYMOUS,
                           tiles ? solver->options.scratch : -1, 0);
        if (own->memory == MAP_FAILED) {
            own->memory = NULL;
            goto memory;
        }
        if (!tiles)
            madvise(own->memory, own->memory_bytes, MADV_HUGEPAGE);
    }
    if (tiles) {
        own->stripe_sums = malloc((windrow_stripes_pages_most(&tiles->stripes) + 1) * sizeof *own->stripe_sums);
        if (!own->stripe_sums)
            goto memory;
    }
    return WINDROW_OK;
memory:
    return windrow_fail(WINDROW_RESOURCE, "out of memory: the vectors of this ranking take %llu bytes",
                        (unsigned long long)windrow_solver_memory_bytes(solver->options.web));
}

static void find_hosts_of_blocks(struct windrow_solver *solver)
{
    const struct windrow_web *web = solver->options.web;
    uint64_t host = 0;
    for (uint64_t block = 0; block < web->block_count[WINDROW_BLOCK_CORE]; block++) {
        uint64_t first = web->record(web->context, WINDROW_BLOCK_CORE, block)->first_target;
        while (web->host_first_core(web->context, host + 1) <= first)
            host++;
        solver->own->first_hosts[block] = host;
    }
}

static enum windrow_status fill_start(void *context, uint64_t chunk, unsigned worker)
{
    (void)worker;
    struct windrow_solver *solver = context;
    const struct windrow_web *web = solver->options.web;
    uint64_t first = chunk * WINDROW_MIXING_CHUNK, end = first + WINDROW_MIXING_CHUNK;
    for (uint64_t i = first; i < end && i < web->core_pages; i++)
        solver->values[i] = (solver->options.core_jump ? solver->options.core_jump[i] : 1.0 / (double)web->pages) / web->degrees[i];
    windrow_solver_release_pages(solver, first, end < web->core_pages ? end : web->core_pages);
    return WINDROW_OK;
}

enum windrow_status windrow_solver_create(const struct windrow_solver_options *options, struct windrow_solver **solver)
{
    const struct windrow_web *web = options->web;
    enum windrow_status status = WINDROW_OK;
    struct windrow_solver *made = calloc(1, sizeof *made);
    if (!made || !(made->own = calloc(1, sizeof *made->own)))
        goto memory;
    made->options = *options;
    struct windrow_solver_private *own = made->own;
    own->workers = windrow_crew_workers(options->crew);
    own->memory_bytes = vector_bytes(web);
    own->tables = calloc(own->workers, sizeof *own->tables);
    own->first_hosts = malloc((web->block_count[WINDROW_BLOCK_CORE] + 1) * sizeof *own->first_hosts);
    if (!own->tables || !own->first_hosts)
        goto memory;
    own->passing = web;
    if ((status = take_memory(made)))
        goto failed;
    uint8_t *memory = own->memory;
    uint64_t floats = web->core_pages * sizeof(float);
    made->values = vector_take(&memory, web->core_pages * sizeof(double));
    made->rim = vector_take(&memory, rim_pages(web) * sizeof(double));
    made->mixing = (struct windrow_mixing){.pages = web->core_pages, .degrees = web->degrees, .change = vector_take(&memory, floats),
                                            .release = options->tiles ? windrow_solver_release_pages : NULL, .release_context = made};
    for (int c = 0; c < WINDROW_MIXING_COLUMNS; c++) {
        made->mixing.change_columns[c] = vector_take(&memory, floats);
        made->mixing.value_columns[c] = vector_take(&memory, floats);
    }
    made->host_passes = vector_take(&memory, web->host_count);
    made->block_passes = vector_take(&memory, web->block_count[WINDROW_BLOCK_CORE]);
    made->state.fall = made->state.caution_rho = 1;
    made->state.caution_error = 2; /* between what crawls and small webs turn out to need */
    find_hosts_of_blocks(made);
    if ((status = windrow_streamer_create(web, options->crew, &own->streamer)))
        goto failed;
    uint64_t chunks = (web->core_pages + WINDROW_MIXING_CHUNK - 1) / WINDROW_MIXING_CHUNK;
    if ((status = windrow_crew_run(options->crew, chunks, fill_start, made)))
        goto failed;
    *solver = made;
    return WINDROW_OK;
memory:
    status = windrow_fail(WINDROW_RESOURCE, "out of memory: the vectors of this ranking take %llu bytes",
                          (unsigned long long)windrow_solver_memory_bytes(web));
failed:
    windrow_solver_destroy(made);
    return status;
}

void windrow_solver_destroy(struct windrow_solver *solver)
{
    if (!solver)
        return;
    struct windrow_solver_private *own = solver->own;
    if (own) {
        windrow_streamer_destroy(own->streamer);
        for (int i = 0; i < WINDROW_WAVE_BLOCKS_MOST; i++)
            windrow_buffer_free(&own->slots[i].values);
        if (own->memory)
            munmap(own->memory, own->memory_bytes);
        free(own->tables);
        free(own->first_hosts);
        free(own->stripe_sums);
        free(own);
    }
    free(solver);
}

unsigned windrow_solver_vectors(struct windrow_solver *solver, struct windrow_solver_vector vectors[WINDROW_SOLVER_VECTORS_MOST])
{
    unsigned count = 0;
    uint64_t floats = solver->mixing.pages * sizeof(float);
    vectors[count++] = (struct windrow_solver_vector){solver->values, solver->mixing.pages * sizeof(double)};
    vectors[count++] = (struct windrow_solver_vector){solver->mixing.change, floats};
    for (int c = 0; c < WINDROW_MIXING_COLUMNS; c++) {
        vectors[count++] = (struct windrow_solver_vector){solver->mixing.change_columns[c], floats};
        vectors[count++] = (struct windrow_solver_vector){solver->mixing.value_columns[c], floats};
    }
    vectors[count++] = (struct windrow_solver_vector){solver->host_passes, solver->options.web->host_count};
    vectors[count++] = (struct windrow_solver_vector){solver->block_passes, solver->options.web->block_count[WINDROW_BLOCK_CORE]};
    if (solver->options.method == WINDROW_METHOD_POWER)
        vectors[count++] = (struct windrow_solver_vector){solver->rim, rim_pages(solver->options.web) * sizeof(double)};
    return count;
}

/* ---- One block ----------------------------------------------------------------------------- */

/* The targets of a block that belong to a host which reaches out of it. */
static void find_own(const struct windrow_solver *solver, uint64_t block, const struct windrow_block_record *record,
                     struct windrow_own own[2])
{
    const struct windrow_web *web = solver->options.web;
    uint64_t first = record->first_target, end = first + record->target_count, host = solver->own->first_hosts[block];
    bool piece = record->flags & WINDROW_BLOCK_PIECE;
    own[0] = own[1] = (struct windrow_own){0};
    uint64_t host_first = web->host_first_core(web->context, host), host_end = web->host_first_core(web->context, host + 1);
    if (host_first < first || host_end > end || piece)
        own[0] = (struct windrow_own){.first = host_first, .end = host_end, .target_end = (uint32_t)((host_end < end ? host_end : end) - first)};
    while (host_end < end) {
        host++;
        host_first = host_end;
        host_end = web->host_first_core(web->context, host + 1);
    }
    if (host_end > end && host_first >= first && own[0].target_end != record->target_count)
        own[1] = (struct windrow_own){.first = host_first, .end = host_end, .target_first = (uint32_t)(host_first - first), .target_end = record->target_count};
}

/* What flows into some targets from outside their block's near sources, and what does not stay in their host. */
static void add_flows(const struct windrow_solver *solver, const struct windrow_kernel *kernel, const double *values,
                      uint32_t target_first, uint32_t target_end, double *inflow, double *kept)
{
    const struct windrow_web *web = solver->options.web;
    uint64_t first = kernel->block.first_target;
    double beta = solver->options.beta;
    for (uint32_t t = target_first; t < target_end; t++) {
        *inflow += windrow_solver_jump(solver, first + t) + beta * kernel->far[t];
        *kept += values[t] * ((double)web->degrees[first + t] - beta * web->inside_degrees[first + t]);
    }
}

/* Scales the targets of a host that lies wholly in the block. */
static void balance_inside(const struct windrow_solver *solver, const struct windrow_kernel *kernel, double *values, uint32_t first, uint32_t end)
{
    double inflow = 0, kept = 0;
    if (end - first < 2)
        return;
    add_flows(solver, kernel, values, first, end, &inflow, &kept);
    double factor = inflow / kept;
    if (kept > 0 && isfinite(factor))
        for (uint32_t t = first; t < end; t++)
            values[t] *= factor;
}

/* Updates the targets of one host, and again `*passes` times. Passes are added where that is worth it: where
 * a pass over near links still changes much beside what a sweep changes on the average link. Slow structures
 * inside a host, such as long chains of pages, would else hold up the whole. Passes are never taken back,
 * since mixing wants every sweep to do the same. */
static enum windrow_status relax_host(const struct windrow_solver *solver, struct windrow_kernel *kernel, const struct windrow_relaxation *relaxation,
                                      struct windrow_near_cursor *cursor, uint32_t first, uint32_t end, bool balance, double *values,
                                      uint8_t *passes, uint64_t *links)
{
    const struct windrow_near_cursor begin = *cursor;
    double change;
    enum windrow_status status = windrow_kernel_relax(kernel, relaxation, cursor, first, end, values, &change);
    uint64_t near_links = (cursor->near - begin.near) + (cursor->run_links - begin.run_links);
    for (unsigned pass = 0; !status; pass++) {
        if (balance)
            balance_inside(solver, kernel, values, first, end);
        if (pass == *passes && near_links && near_links <= solver->own->inner_links_most && pass < INNER_PASSES_MOST && change > solver->own->worth * (double)near_links)
            ++*passes;
        if (pass == *passes)
            break;
        *cursor = begin;
        status = windrow_kernel_relax(kernel, relaxation, cursor, first, end, values, &change);
        *links += near_links;
    }
    return status;
}

static enum windrow_status relax_block(void *context, uint64_t block, unsigned index, struct windrow_kernel *kernel, unsigned worker)
{
    (void)worker;
    struct windrow_solver *solver = context;
    const struct windrow_web *web = solver->options.web;
    const struct windrow_block_record *record = kernel->record;
    struct windrow_solver_slot *slot = &solver->own->slots[index];
    uint64_t first = record->first_target;
    bool balance = windrow_solver_balances(solver);
    enum windrow_status status = windrow_solver_slot_room(slot, record->target_count);
    if (status)
        return status;
    double *values = windrow_solver_slot_values(slot);
    slot->inner_links = 0;
    slot->inflow[0] = slot->inflow[1] = slot->kept[0] = slot->kept[1] = 0;
    slot->own[0] = slot->own[1] = (struct windrow_own){0};
    if (balance)
        find_own(solver, block, record, slot->own);
    bool reaches_out = slot->own[0].target_end || slot->own[1].target_end;
    if ((status = windrow_kernel_gather(kernel, solver->values, web->core_pages, reaches_out ? slot->own : NULL)))
        return status;
    if (solver->own->inflow && !(record->flags & WINDROW_BLOCK_PIECE))
        for (uint32_t t = 0; t < record->target_count; t++)
            kernel->far[t] += windrow_solver_inflow(solver, first + t);
    if (record->flags & WINDROW_BLOCK_PIECE) {
        if ((status = windrow_kernel_sums(kernel, solver->values, web->core_pages, values)))
            return status;
        slot->piece_sum = values[0];
        slot->piece_own = slot->own[0].sum + windrow_kernel_runs_inside(kernel, solver->values, slot->own[0].first, slot->own[0].end);
        return WINDROW_OK;
    }
    memcpy(values, solver->values + first, record->target_count * sizeof *values);
    struct windrow_relaxation relaxation = {
        .beta = solver->options.beta,
        .jump = windrow_solver_jump(solver, first),
        .jumps = solver->options.core_jump ? solver->options.core_jump + first : NULL,
        .degrees = web->degrees + first,
    };
    struct windrow_near_cursor cursor = windrow_kernel_near_begin(kernel, values);
    uint64_t host = solver->own->first_hosts[block];
    for (uint32_t t = 0; t < record->target_count;) {
        uint64_t host_end = web->host_first_core(web->context, ++host) - first;
        uint32_t end = host_end < record->target_count ? (uint32_t)host_end : record->target_count;
        bool whole = t >= slot->own[0].target_end && (slot->own[1].target_end == 0 || end <= slot->own[1].target_first);
        if (end > t && (status = relax_host(solver, kernel, &relaxation, &cursor, t, end, balance && whole, values,
                                                  t == 0 ? &solver->block_passes[block] : &solver->host_passes[host - 1], &slot->inner_links)))
            return status;
        t = end;
    }
    for (int side = 0; balance && side < 2; side++) {
        add_flows(solver, kernel, values, slot->own[side].target_first, slot->own[side].target_end, &slot->inflow[side], &slot->kept[side]);
        slot->inflow[side] -= solver->options.beta * slot->own[side].sum;
    }
    return WINDROW_OK;
}

/* ---- Between waves ------------------------------------------------------------------------- */

static enum windrow_status commit_task(void *context, uint64_t index, unsigned worker)
{
    (void)worker;
    struct windrow_solver *solver = context;
    const struct windrow_web *web = solver->options.web;
    const struct windrow_block_record *record = web->record(web->context, WINDROW_BLOCK_CORE, solver->own->wave_first + index);
    if (record->flags & WINDROW_BLOCK_PIECE)
        return WINDROW_OK;
    const double *values = windrow_solver_slot_values(&solver->own->slots[index]);
    double *to = solver->values + record->first_target;
    float *change = solver->mixing.change + record->first_target;
    for (uint32_t t = 0; t < record->target_count; t++) {
        change[t] = (float)(values[t] - to[t]);
        to[t] = values[t];
    }
    return WINDROW_OK;
}

struct scaling {
    struct windrow_solver *solver;
    uint64_t first, end;
    double factor;
};

static enum windrow_status scale_task(void *context, uint64_t chunk, unsigned worker)
{
    (void)worker;
    const struct scaling *scaling = context;
    uint64_t first = scaling->first + chunk * WINDROW_MIXING_CHUNK, end = first + WINDROW_MIXING_CHUNK;
    double *values = scaling->solver->values;
    float *change = scaling->solver->mixing.change;
    for (uint64_t i = first; i < end && i < scaling->end; i++) {
        double before = values[i];
        values[i] = before * scaling->factor;
        change[i] = (float)(change[i] + (values[i] - before));
    }
    return WINDROW_OK;
}

static enum windrow_status balance_across(struct windrow_solver *solver, uint64_t first, uint64_t end)
{
    struct windrow_solver_carry *carry = &solver->state.carry;
    struct scaling scaling = {solver, first, end, carry->host_inflow / carry->host_kept};
    if (end - first < 2 || !(carry->host_kept > 0) || !isfinite(scaling.factor) || scaling.factor < 0)
        return WINDROW_OK;
    return windrow_crew_run(solver->options.crew, (end - first + WINDROW_MIXING_CHUNK - 1) / WINDROW_MIXING_CHUNK, scale_task, &scaling);
}

static void add_piece(struct windrow_solver_carry *carry, const struct windrow_solver_slot *slot)
{
    if (!carry->piece_open)
        carry->piece_sum = carry->piece_error = carry->piece_own = 0;
    /* Neumaier's compensation, as inside a block. */
    double sum = carry->piece_sum + slot->piece_sum;
    carry->piece_error += carry->piece_sum >= slot->piece_sum ? (carry->piece_sum - sum) + slot->piece_sum : (slot->piece_sum - sum) + carry->piece_sum;
    carry->piece_sum = sum;
    carry->piece_own += slot->piece_own;
}

/* The last piece of a list is in: its page is updated now. */
static void update_piece(struct windrow_solver *solver, uint64_t page, struct windrow_solver_slot *slot)
{
    const struct windrow_web *web = solver->options.web;
    const struct windrow_solver_carry *carry = &solver->state.carry;
    double beta = solver->options.beta, jump = windrow_solver_jump(solver, page), before = solver->values[page];
    double sum = carry->piece_sum + carry->piece_error + windrow_solver_inflow(solver, page);
    double value = (jump + beta * sum) / web->degrees[page];
    solver->values[page] = value;
    solver->mixing.change[page] = (float)(value - before);
    slot->inflow[0] = jump + beta * (sum - carry->piece_own);
    slot->kept[0] = value * ((double)web->degrees[page] - beta * web->inside_degrees[page]);
}

/* Lists in pieces and hosts that reach across blocks, in block order. */
static enum windrow_status settle_block(struct windrow_solver *solver, uint64_t block, struct windrow_solver_slot *slot)
{
    const struct windrow_web *web = solver->options.web;
    const struct windrow_block_record *record = web->record(web->context, WINDROW_BLOCK_CORE, block);
    struct windrow_solver_carry *carry = &solver->state.carry;
    uint64_t first = record->first_target, end = first + record->target_count;
    bool piece = record->flags & WINDROW_BLOCK_PIECE, unfinished = false, list_begins = !carry->piece_open;
    if (piece) {
        add_piece(carry, slot);
        unfinished = !(record->flags & WINDROW_BLOCK_LAST_PIECE);
        if (!unfinished)
            update_piece(solver, first, slot);
        carry->piece_open = unfinished;
    }
    for (int side = 0; side < 2; side++) {
        const struct windrow_own *own = &slot->own[side];
        if (own->target_end == 0)
            continue;
        if (own->first >= first && list_begins)
            carry->host_inflow = carry->host_kept = 0;
        carry->host_inflow += slot->inflow[side];
        carry->host_kept += slot->kept[side];
        if (own->end > end || unfinished)
            continue;
        /* Part of its inflow is lost in that from other stripes. */
        if (solver->own->inflow && own->first < solver->own->inflow_first)
            continue;
        enum windrow_status status = balance_across(solver, own->first, own->end);
        if (status)
            return status;
    }
    return WINDROW_OK;
}

static enum windrow_status sweep_barrier(void *context, uint64_t first, uint64_t end)
{
    struct windrow_solver *solver = context;
    solver->own->wave_first = first;
    enum windrow_status status = windrow_crew_run(solver->options.crew, end - first, commit_task, solver);
    for (uint64_t block = first; !status && block < end; block++)
        status = settle_block(solver, block, &solver->own->slots[block - first]);
    if (status)
        return status;
    windrow_solver_count_links(solver, WINDROW_BLOCK_CORE, first, end);
    for (uint64_t block = first; block < end; block++)
        solver->state.link_visits += solver->own->slots[block - first].inner_links;
    solver->state.next_block = end;
    /* After the last wave the sweep is finished first: there is no state between. */
    if (end == solver->options.web->block_count[WINDROW_BLOCK_CORE] || !solver->options.pause)
        return WINDROW_OK;
    return solver->options.pause(solver->options.pause_context);
}

/* ---- Sweeps -------------------------------------------------------------------------------- */

void windrow_solver_remember_change(struct windrow_solver *solver, double change)
{
    struct windrow_solver_state *state = &solver->state;
    enum { MOST = WINDROW_SOLVER_MEMORY_SWEEPS + 1 };
    if (state->change_count == MOST)
        memmove(state->changes, state->changes + 1, (MOST - 1) * sizeof *state->changes);
    else
        state->change_count++;
    state->changes[state->change_count - 1] = change;
}

static double change_before(const struct windrow_solver_state *state, uint64_t sweeps_ago)
{
    return state->changes[state->change_count - 1 - sweeps_ago];
}

static void watch_guard(struct windrow_solver *solver)
{
    struct windrow_solver_state *state = &solver->state;
    if (state->guard == WINDROW_GUARD_NO_MIXING || state->change_count < 3)
        return;
    double now = change_before(state, 0);
    bool grows = now > change_before(state, 1) && change_before(state, 1) > change_before(state, 2);
    bool slow = state->change_count > WINDROW_SOLVER_MEMORY_SWEEPS &&
                now > change_before(state, WINDROW_SOLVER_MEMORY_SWEEPS) * pow(solver->options.beta, WINDROW_SOLVER_MEMORY_SWEEPS);
    if (grows)
        state->mixing = (struct windrow_mixing_state){0};
    if (slow) {
        state->guard++;
        state->mixing = (struct windrow_mixing_state){0};
        state->changes[0] = now;
        state->change_count = 1;
    }
}

static enum windrow_status finish_sweep(struct windrow_solver *solver)
{
    struct windrow_solver_state *state = &solver->state;
    struct windrow_mixing_result result = {.fall = 1};
    bool mix = !solver->options.without_mixing && state->guard < WINDROW_GUARD_NO_MIXING && solver->options.method == WINDROW_METHOD_MIXED;
    double floor = solver->options.core_jump ? 1 - solver->options.beta : windrow_solver_jump(solver, 0);
    solver->mixing.state = state->mixing;
    enum windrow_status status = windrow_mixing_step(&solver->mixing, solver->options.crew, solver->values, floor,
                                                     solver->options.core_jump, mix, &result);
    if (status)
        return status;
    state->mixing = solver->mixing.state;
    state->fall = result.fall;
    state->change_relative = result.change_relative;
    state->sweeps++;
    state->next_block = 0;
    state->carry = (struct windrow_solver_carry){0};
    windrow_solver_remember_change(solver, result.change_l1);
    watch_guard(solver);
    return WINDROW_OK;
}

/* How much the next sweep is likely to shrink the error. */
static double next_fall(const struct windrow_solver_state *state)
{
    if (state->change_count < 2)
        return 1;
    double last = change_before(state, 1) > 0 ? change_before(state, 0) / change_before(state, 1) : 0;
    return fmin(1, last);
}

enum windrow_status windrow_solver_sweep(struct windrow_solver *solver)
{
    if (solver->options.method == WINDROW_METHOD_POWER)
        return windrow_solver_power_sweep(solver);
    const struct windrow_solver_state *state = &solver->state;
    solver->own->worth = INFINITY;
    solver->own->inner_links_most = solver->options.web->links[WINDROW_BLOCK_CORE] / 16;
    if (!solver->options.without_inner_passes && state->sweeps >= INNER_FROM)
        solver->own->worth = WORTH * change_before(state, 0) * next_fall(state) / (double)(solver->options.web->links[WINDROW_BLOCK_CORE] + 1);
    const struct windrow_stream_job job = {.context = solver, .work = relax_block, .barrier = sweep_barrier};
    enum windrow_status status = windrow_solver_stream_core(solver, solver->state.next_block, &job);
    return status ? status : finish_sweep(solver);
}

double windrow_solver_expected_error(const struct windrow_solver *solver)
{
    const struct windrow_solver_state *state = &solver->state;
    if (state->change_count == 0)
        return -1;
    return state->caution_error * change_before(state, 0) * next_fall(state) / (1 - solver->options.beta);
}

double windrow_solver_expected_rho(const struct windrow_solver *solver)
{
    const struct windrow_solver_state *state = &solver->state;
    if (state->change_count == 0)
        return -1;
    double beta = solver->options.beta, terms = log((double)solver->options.web->pages / (1 - beta)) / -log(beta);
    return state->caution_rho * state->change_relative * next_fall(state) * (terms + 1 / (1 - beta));
}
