/* The certifying passes: over the core, in which nothing changes, and over the rim, which gives the dangling
 * pages their scores. The core comes first: where its residual alone is too large, the rim is left out.
 *
 * Summing all equations of the linear system gives scale = sum(y) = (1-beta) + beta sum(y over the core) -
 * sum(r), where r is the residual on the core (on the rim there is none but rounding). So before the passes
 * the scale is known up to sum(r), which is bounded by what the core pass finds; and in q = r/scale + c v,
 * c is -sum(r)/scale, up to rounding.
 *
 * With u = 2^-53, and k roundings in the sum over a page's in-links (kernel.h), the residual that the core
 * pass computes differs from the true one of the scores handed out by at most ((k+3) h + 4 y) u / scale and
 * 16 u v, for the constant c and the scale; h = (1-beta) v + beta sum, y the page's own entry. A dangling page's y
 * is such an h itself, so that its residual is c v, and rounding below (k+8) u x.
 */
#include "rank/solver.h"

#include "rank/solver_private.h"

#include <math.h>
#include <stdlib.h>

static const double unit = 0x1p-53;

static void add_total(struct windrow_solver_private *own, double value)
{
    double sum = own->total + value;
    own->total_error += fabs(own->total) >= fabs(value) ? (own->total - sum) + value : (value - sum) + own->total;
    own->total = sum;
}

static void clear_totals(struct windrow_solver *solver)
{
    struct windrow_solver_private *own = solver->own;
    own->total = own->total_error = own->rounding = 0;
    own->piece_links = 0;
    solver->state.carry = (struct windrow_solver_carry){0};
    for (unsigned worker = 0; worker < own->workers; worker++)
        windrow_class_table_clear(&own->tables[worker]);
}

/* Roundings in a sum that was made of parts, one a stripe of sources and piece: as many as the longest list has in one part, and
 * those of joining the parts. */
static double parts_roundings(const struct windrow_solver *solver)
{
    const struct windrow_tiles *tiles = solver->options.tiles;
    return windrow_kernel_roundings(UINT64_MAX) + tiles->stripes.count + (double)tiles->pieces_most;
}

static double core_roundings(const struct windrow_solver *solver, uint64_t links)
{
    return solver->options.tiles ? parts_roundings(solver) : windrow_kernel_roundings(links);
}

/* Adds a piece's sum to its list's. True when the list is whole: its sum and links are handed out. */
static bool join_piece(struct windrow_solver *solver, const struct windrow_block_record *record, double piece_sum, double *sum, uint64_t *links)
{
    struct windrow_solver_carry *carry = &solver->state.carry;
    struct windrow_solver_private *own = solver->own;
    if (!carry->piece_open)
        carry->piece_sum = carry->piece_error = 0, own->piece_links = 0;
    double next = carry->piece_sum + piece_sum;
    carry->piece_error += carry->piece_sum >= piece_sum ? (carry->piece_sum - next) + piece_sum : (piece_sum - next) + carry->piece_sum;
    carry->piece_sum = next;
    own->piece_links += record->link_count;
    carry->piece_open = !(record->flags & WINDROW_BLOCK_LAST_PIECE);
    *sum = carry->piece_sum + carry->piece_error;
    *links = own->piece_links;
    return !carry->piece_open;
}

/* ---- The rim ------------------------------------------------------------------------------- */

/* A dangling page's y is known: notes the roundings of its class (by y/v, as the scale is not known yet). */
static double note_rim_page(struct windrow_solver *solver, struct windrow_class_table *table, uint64_t page, double sum, double sum_roundings,
                            double *rounding)
{
    double jump = windrow_solver_rim_jump(solver, page), beta = solver->options.beta, y = jump + beta * sum;
    double roundings = (sum_roundings + 8) * unit;
    solver->rim[page] = y;
    if (!(y > 0))
        return y;
    unsigned class_number = windrow_class_of(y / (jump / (1 - beta)));
    table->rounding[class_number] = fmax(table->rounding[class_number], roundings);
    table->least_score = fmin(table->least_score, y);
    *rounding += roundings * y;
    return y;
}

static enum windrow_status rim_block(void *context, uint64_t block, unsigned index, struct windrow_kernel *kernel, unsigned worker)
{
    (void)block;
    struct windrow_solver *solver = context;
    uint64_t core_pages = solver->options.web->core_pages, first = kernel->record->first_target;
    struct windrow_solver_slot *slot = &solver->own->slots[index];
    enum windrow_status status = windrow_solver_slot_room(slot, kernel->record->target_count);
    if (!status)
        status = windrow_kernel_gather(kernel, solver->values, core_pages, NULL);
    if (status)
        return status;
    double *sums = windrow_solver_slot_values(slot);
    if ((status = windrow_kernel_sums(kernel, solver->values, core_pages, sums)))
        return status;
    slot->sum = slot->rounding = 0;
    slot->piece_sum = sums[0];
    if (kernel->record->flags & WINDROW_BLOCK_PIECE)
        return WINDROW_OK;
    uint32_t run = 0;
    for (uint32_t t = 0; t < kernel->record->target_count; t++)
        slot->sum += note_rim_page(solver, &solver->own->tables[worker], first + t, sums[t], windrow_kernel_roundings(windrow_kernel_links(kernel, t, &run)), &slot->rounding);
    return WINDROW_OK;
}

static enum windrow_status rim_barrier(void *context, uint64_t first, uint64_t end)
{
    struct windrow_solver *solver = context;
    const struct windrow_web *web = solver->options.web;
    for (uint64_t block = first; block < end; block++) {
        const struct windrow_block_record *record = web->record(web->context, WINDROW_BLOCK_RIM, block);
        struct windrow_solver_slot *slot = &solver->own->slots[block - first];
        double sum;
        uint64_t links;
        if (record->flags & WINDROW_BLOCK_PIECE && join_piece(solver, record, slot->piece_sum, &sum, &links))
            slot->sum = note_rim_page(solver, &solver->own->tables[0], record->first_target, sum, windrow_kernel_roundings(links), &slot->rounding);
        add_total(solver->own, slot->sum);
        solver->own->rounding += slot->rounding;
    }
    windrow_solver_count_links(solver, WINDROW_BLOCK_RIM, first, end);
    return windrow_solver_stop_asked(solver);
}

/* With tiles: the vector of the rim holds the sums, and every page is noted. */
struct rim_pass {
    struct windrow_solver *solver;
    struct rim_chunk {
        double sum, rounding;
    } *chunks;
};

static enum windrow_status rim_chunk_task(void *context, uint64_t chunk, unsigned worker)
{
    const struct rim_pass *pass = context;
    struct windrow_solver *solver = pass->solver;
    uint64_t rim_pages = solver->options.web->pages - solver->options.web->core_pages;
    uint64_t first = chunk * WINDROW_MIXING_CHUNK, end = first + WINDROW_MIXING_CHUNK < rim_pages ? first + WINDROW_MIXING_CHUNK : rim_pages;
    struct windrow_solver_private local = {0};
    double rounding = 0, roundings = parts_roundings(solver);
    for (uint64_t page = first; page < end; page++)
        add_total(&local, note_rim_page(solver, &solver->own->tables[worker], page, solver->rim[page], roundings, &rounding));
    windrow_solver_release(solver, solver->rim + first, (end - first) * sizeof *solver->rim);
    pass->chunks[chunk] = (struct rim_chunk){local.total + local.total_error, rounding};
    return WINDROW_OK;
}

static enum windrow_status pass_rim_by_stripes(struct windrow_solver *solver)
{
    uint64_t rim_pages = solver->options.web->pages - solver->options.web->core_pages;
    uint64_t chunk_count = (rim_pages + WINDROW_MIXING_CHUNK - 1) / WINDROW_MIXING_CHUNK;
    struct rim_pass pass = {solver, calloc(chunk_count + 1, sizeof *pass.chunks)};
    if (!pass.chunks)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while certifying");
    enum windrow_status status = windrow_solver_sum_rim(solver);
    if (!status)
        status = windrow_crew_run(solver->options.crew, chunk_count, rim_chunk_task, &pass);
    for (uint64_t chunk = 0; !status && chunk < chunk_count; chunk++) {
        add_total(solver->own, pass.chunks[chunk].sum);
        solver->own->rounding += pass.chunks[chunk].rounding;
    }
    free(pass.chunks);
    return status;
}

/* ---- The core ------------------------------------------------------------------------------ */

/* Notes r without c v, by the scale as it is known so far. */
static void note_core_page(struct windrow_solver *solver, struct windrow_class_table *table, uint64_t page, double sum, double sum_roundings,
                           struct windrow_solver_slot *slot)
{
    double jump = windrow_solver_jump(solver, page), beta = solver->options.beta, scale = solver->scale;
    double jump_entry = jump / (1 - beta), h = jump + beta * sum, y = solver->values[page] * solver->options.web->degrees[page];
    double rounding = (((sum_roundings + 3) * h + 4 * y) / scale + 16 * jump_entry) * unit;
    double residual = fabs(h - y) / scale + rounding;
    slot->sum += residual;
    slot->rounding += rounding;
    if (!(y > 0))
        return;
    double x = y / scale;
    unsigned class_number = windrow_class_of(x / jump_entry);
    if (residual > table->residual[class_number] * x)
        table->residual[class_number] = residual / x;
    if (rounding > table->rounding[class_number] * x)
        table->rounding[class_number] = rounding / x;
    table->least_score = fmin(table->least_score, x);
}

static enum windrow_status core_block(void *context, uint64_t block, unsigned index, struct windrow_kernel *kernel, unsigned worker)
{
    (void)block;
    struct windrow_solver *solver = context;
    uint64_t core_pages = solver->options.web->core_pages, first = kernel->record->first_target;
    struct windrow_solver_slot *slot = &solver->own->slots[index];
    enum windrow_status status = windrow_solver_slot_room(slot, kernel->record->target_count);
    if (!status)
        status = windrow_kernel_gather(kernel, solver->values, core_pages, NULL);
    if (status)
        return status;
    double *sums = windrow_solver_slot_values(slot);
    if ((status = windrow_kernel_sums(kernel, solver->values, core_pages, sums)))
        return status;
    slot->sum = slot->rounding = 0;
    slot->piece_sum = sums[0];
    if (kernel->record->flags & WINDROW_BLOCK_PIECE)
        return WINDROW_OK;
    uint32_t run = 0;
    for (uint32_t t = 0; t < kernel->record->target_count; t++) {
        double roundings = core_roundings(solver, windrow_kernel_links(kernel, t, &run));
        note_core_page(solver, &solver->own->tables[worker], first + t, sums[t] + windrow_solver_inflow(solver, first + t), roundings, slot);
    }
    return WINDROW_OK;
}

static enum windrow_status core_barrier(void *context, uint64_t first, uint64_t end)
{
    struct windrow_solver *solver = context;
    const struct windrow_web *web = solver->options.web;
    for (uint64_t block = first; block < end; block++) {
        const struct windrow_block_record *record = web->record(web->context, WINDROW_BLOCK_CORE, block);
        struct windrow_solver_slot *slot = &solver->own->slots[block - first];
        double sum;
        uint64_t links;
        if (record->flags & WINDROW_BLOCK_PIECE && join_piece(solver, record, slot->piece_sum, &sum, &links))
            note_core_page(solver, &solver->own->tables[0], record->first_target, sum + windrow_solver_inflow(solver, record->first_target),
                           core_roundings(solver, links), slot);
        add_total(solver->own, slot->sum);
        solver->own->rounding += slot->rounding;
    }
    windrow_solver_count_links(solver, WINDROW_BLOCK_CORE, first, end);
    return windrow_solver_stop_asked(solver);
}

/* ---- All together -------------------------------------------------------------------------- */

struct core_sum {
    const struct windrow_solver *solver;
    double *chunks;
};

static enum windrow_status core_sum_task(void *context, uint64_t chunk, unsigned worker)
{
    (void)worker;
    const struct core_sum *core_sum = context;
    const struct windrow_web *web = core_sum->solver->options.web;
    uint64_t first = chunk * WINDROW_MIXING_CHUNK, end = first + WINDROW_MIXING_CHUNK;
    struct windrow_solver_private local = {0};
    for (uint64_t i = first; i < end && i < web->core_pages; i++)
        add_total(&local, core_sum->solver->values[i] * web->degrees[i]);
    core_sum->chunks[chunk] = local.total + local.total_error;
    windrow_solver_release_pages(core_sum->solver, first, end < web->core_pages ? end : web->core_pages);
    return WINDROW_OK;
}

static enum windrow_status add_core(struct windrow_solver *solver)
{
    uint64_t chunk_count = (solver->options.web->core_pages + WINDROW_MIXING_CHUNK - 1) / WINDROW_MIXING_CHUNK;
    struct core_sum core_sum = {solver, malloc((chunk_count + 1) * sizeof(double))};
    if (!core_sum.chunks)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while certifying");
    enum windrow_status status = windrow_crew_run(solver->options.crew, chunk_count, core_sum_task, &core_sum);
    for (uint64_t chunk = 0; !status && chunk < chunk_count; chunk++)
        add_total(solver->own, core_sum.chunks[chunk]);
    free(core_sum.chunks);
    return status;
}

static void join_workers(struct windrow_solver *solver, struct windrow_class_table *table)
{
    windrow_class_table_clear(table);
    for (unsigned worker = 0; worker < solver->own->workers; worker++)
        windrow_class_table_join(table, &solver->own->tables[worker]);
}

/* What |c| v adds to the classes of the core. The scale that they were noted by was off by `slack`. */
static void finish_core_classes(struct windrow_class_table *table, double beta, double excess, double slack)
{
    for (unsigned c = 0; c < WINDROW_CLASSES; c++) {
        if (table->residual[c] == 0)
            continue;
        /* y is (1-beta) v at least, so v/x is at most scale/(1-beta), and the scale at most 1. */
        double most = fmin(c > 0 ? windrow_class_least_jump(c - 1) : INFINITY, 1 / (1 - beta)) * (1 + 1e-11);
        table->residual[c] = (table->residual[c] + excess * most) * (1 + slack);
        table->rounding[c] *= 1 + slack;
    }
    table->least_score *= 1 - slack;
}

/* The rim's classes were by y/v. Each becomes entries of the class by x/v in which its pages with the least
 * v/x are, with the residual of those with the greatest. */
static void add_rim_classes(const struct windrow_solver *solver, const struct windrow_class_table *rim, double excess, struct windrow_class_table *table)
{
    double scale = solver->scale, beta = solver->options.beta;
    for (unsigned c = 0; c < WINDROW_CLASSES; c++) {
        if (rim->rounding[c] == 0)
            continue;
        double least = windrow_class_least_jump(c) * scale * (1 - 1e-11);
        double most = fmin(c > 0 ? windrow_class_least_jump(c - 1) * scale : INFINITY, scale / (1 - beta)) * (1 + 1e-11);
        unsigned to = windrow_class_of(1 / least);
        table->rounding[to] = fmax(table->rounding[to], rim->rounding[c] + 16 * unit * most);
        table->residual[to] = fmax(table->residual[to], rim->rounding[c] + excess * most);
    }
    table->least_score = fmin(table->least_score, rim->least_score / scale * (1 - 1e-12));
}

static double rim_jump_sum(const struct windrow_solver *solver)
{
    const struct windrow_web *web = solver->options.web;
    if (!solver->options.rim_jump)
        return (double)(web->pages - web->core_pages) / (double)web->pages;
    double sum = 0;
    for (uint64_t i = 0; i < web->pages - web->core_pages; i++)
        sum += solver->options.rim_jump[i];
    return sum;
}

/* What was expected and what was found tell how to expect the next time. */
static double new_caution(double before, double expected, double found)
{
    if (!(expected > 0) || !isfinite(found))
        return before;
    return fmin(fmax(before * found / expected, 0.25), 64);
}

static void take_caution(struct windrow_solver *solver, const struct windrow_certificate *certificate)
{
    struct windrow_solver_state *state = &solver->state;
    state->caution_error = new_caution(state->caution_error, windrow_solver_expected_error(solver), certificate->error_l1);
    state->caution_rho = new_caution(state->caution_rho, windrow_solver_expected_rho(solver), certificate->rho);
}

static bool core_suffices(const struct windrow_certificate *core, double wanted_error, double wanted_rho)
{
    return (wanted_error == 0 || core->error_l1 <= wanted_error) && (wanted_rho == 0 || core->rho <= wanted_rho);
}

enum windrow_status windrow_solver_certify(struct windrow_solver *solver, double wanted_error, double wanted_rho,
                                           struct windrow_certificate *certificate, bool *complete)
{
    struct windrow_solver_private *own = solver->own;
    const struct windrow_stream_job rim_job = {.context = solver, .work = rim_block, .barrier = rim_barrier};
    const struct windrow_stream_job core_job = {.context = solver, .work = core_block, .barrier = core_barrier};
    struct windrow_class_table table, core_table, rim_table;
    double beta = solver->options.beta;
    enum windrow_status status;
    *complete = false;

    clear_totals(solver);
    if ((status = add_core(solver)))
        return status;
    double core_sum = own->total + own->total_error, core_scale = (1 - beta) + beta * core_sum;
    solver->scale = core_scale;
    clear_totals(solver);
    own->certifying = true;
    status = windrow_solver_stream_core(solver, 0, &core_job);
    own->certifying = false;
    solver->state.carry = (struct windrow_solver_carry){0};
    if (status)
        return status;
    double core_residual = own->total + own->total_error, core_rounding = own->rounding;
    join_workers(solver, &core_table);
    solver->state.certifications++;
    /* Less than this cannot come out: whether it is enough is seen before the rim is read. */
    windrow_certificate_make(certificate, beta, &core_table, core_residual, core_rounding, 0);
    if (!core_suffices(certificate, wanted_error, wanted_rho)) {
        take_caution(solver, certificate);
        return WINDROW_OK;
    }

    clear_totals(solver);
    if (solver->options.tiles)
        status = pass_rim_by_stripes(solver);
    else
        status = windrow_solver_stream(solver, solver->options.web, WINDROW_BLOCK_RIM, 0, solver->options.web->block_count[WINDROW_BLOCK_RIM], &rim_job);
    solver->state.carry = (struct windrow_solver_carry){0};
    if (status)
        return status;
    join_workers(solver, &rim_table);
    double rim_sum = own->total + own->total_error, rim_rounding = own->rounding;
    solver->scale = core_sum + rim_sum;
    if (!(solver->scale > 0) || !isfinite(solver->scale))
        return windrow_fail(WINDROW_BUG, "the scores do not add up to a positive number");
    double excess = fabs(((1 - beta) + beta * (rim_sum / solver->scale)) - (1 - beta) / solver->scale) + 16 * unit;
    double slack = fabs(core_scale / solver->scale - 1) * (1 + 1e-9) + 16 * unit;
    finish_core_classes(&core_table, beta, excess, slack);
    table = core_table;
    add_rim_classes(solver, &rim_table, excess, &table);
    double rim_jump = rim_jump_sum(solver);
    double rounding = core_rounding * (1 + slack) + rim_rounding / solver->scale + 16 * unit * rim_jump;
    double residual = core_residual * (1 + slack) + rim_rounding / solver->scale + excess * (1 + 1e-9);
    windrow_certificate_make(certificate, beta, &table, residual, rounding, 16 * unit);
    take_caution(solver, certificate);
    *complete = true;
    return WINDROW_OK;
}
