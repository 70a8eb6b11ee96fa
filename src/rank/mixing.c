#include "rank/mixing.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

enum { COLUMNS = WINDROW_MIXING_COLUMNS };

/* The sums over one chunk, and over all. */
struct sums {
    double change_l1, change_relative;
    double square;                 /* f with f */
    double with_change[COLUMNS];   /* dF_j with f, newest first */
    double with_newest[COLUMNS];   /* dF_j with the newest dF */
};

struct step {
    struct windrow_mixing *mixing;
    double *values;
    double floor;
    const double *floors;
    struct sums *chunks;
    unsigned slots[COLUMNS];   /* columns to use, newest first */
    unsigned columns;
    bool fresh;                /* the newest column is completed in this step */
    unsigned next;             /* column that is begun in this step */
    double gamma[COLUMNS];
};

static uint64_t chunk_end(const struct windrow_mixing *mixing, uint64_t chunk)
{
    uint64_t end = (chunk + 1) * WINDROW_MIXING_CHUNK;
    return end < mixing->pages ? end : mixing->pages;
}

static void release(const struct windrow_mixing *mixing, uint64_t first, uint64_t end)
{
    if (mixing->release)
        mixing->release(mixing->release_context, first, end);
}

/* Two pages side by side: the same additions on every machine, and fast on those with such registers. */
typedef double pair __attribute__((vector_size(16)));

static inline pair pair_load(const float *from, uint64_t i)
{
    return (pair){from[i], from[i + 1]};
}

static inline double pair_sum(pair lanes)
{
    return lanes[0] + lanes[1];
}

/* What can be measured from f alone. */
static void measure_change(const struct step *step, uint64_t first, uint64_t end, struct sums *sums)
{
    const struct windrow_mixing *mixing = step->mixing;
    for (uint64_t i = first; i < end; i++) {
        double size = fabsf(mixing->change[i]);
        sums->change_l1 += size * mixing->degrees[i];
        if (size > sums->change_relative * step->values[i])
            sums->change_relative = size / step->values[i];
    }
}

/* The last column gets its differences: until now it held the f before, and dX. */
static void complete_column(const struct step *step, uint64_t first, uint64_t end)
{
    const float *change = step->mixing->change;
    float *change_column = step->mixing->change_columns[step->slots[0]], *value_column = step->mixing->value_columns[step->slots[0]];
    for (uint64_t i = first; i < end; i++) {
        change_column[i] = change[i] - change_column[i];
        value_column[i] += change_column[i];
    }
}

static inline __attribute__((always_inline)) void multiply_columns(const struct step *step, unsigned columns, uint64_t first, uint64_t end, struct sums *sums)
{
    const struct windrow_mixing *mixing = step->mixing;
    pair square = {0}, with_change[COLUMNS] = {{0}}, with_newest[COLUMNS] = {{0}};
    const float *column[COLUMNS];
    for (unsigned a = 0; a < columns; a++)
        column[a] = mixing->change_columns[step->slots[a]];
    uint64_t i = first;
    for (; i + 2 <= end; i += 2) {
        pair degree = {mixing->degrees[i], mixing->degrees[i + 1]}, weight = degree * degree;
        pair f = pair_load(mixing->change, i), weighed = weight * f, newest = columns ? weight * pair_load(column[0], i) : f;
        square += weighed * f;
        for (unsigned a = 0; a < columns; a++) {
            pair entry = pair_load(column[a], i);
            with_change[a] += entry * weighed;
            with_newest[a] += entry * newest;
        }
    }
    sums->square = pair_sum(square);
    for (unsigned a = 0; a < columns; a++) {
        sums->with_change[a] = pair_sum(with_change[a]);
        sums->with_newest[a] = pair_sum(with_newest[a]);
    }
    if (i == end)
        return;
    double weight = (double)mixing->degrees[i] * mixing->degrees[i], f = mixing->change[i];
    sums->square += weight * f * f;
    for (unsigned a = 0; a < columns; a++) {
        sums->with_change[a] += weight * column[a][i] * f;
        sums->with_newest[a] += weight * column[a][i] * column[0][i];
    }
}

static enum windrow_status measure_task(void *context, uint64_t chunk, unsigned worker)
{
    (void)worker;
    const struct step *step = context;
    uint64_t first = chunk * WINDROW_MIXING_CHUNK, end = chunk_end(step->mixing, chunk);
    struct sums sums = {0};
    /* Pieces that stay in the nearest cache from pass to pass. */
    enum { PIECE = 1024 };
    for (uint64_t at = first; at < end; at += PIECE) {
        uint64_t to = at + PIECE < end ? at + PIECE : end;
        struct sums piece = {0};
        measure_change(step, at, to, &sums);
        if (step->fresh)
            complete_column(step, at, to);
        if (step->columns == COLUMNS)
            multiply_columns(step, COLUMNS, at, to, &piece);
        else
            multiply_columns(step, step->columns, at, to, &piece);
        sums.square += piece.square;
        for (unsigned a = 0; a < step->columns; a++) {
            sums.with_change[a] += piece.with_change[a];
            sums.with_newest[a] += piece.with_newest[a];
        }
    }
    step->chunks[chunk] = sums;
    release(step->mixing, first, end);
    return WINDROW_OK;
}

static struct sums add_chunks(const struct step *step, uint64_t chunk_count)
{
    struct sums total = {0};
    for (uint64_t c = 0; c < chunk_count; c++) {
        const struct sums *chunk = &step->chunks[c];
        total.change_l1 += chunk->change_l1;
        total.change_relative = fmax(total.change_relative, chunk->change_relative);
        total.square += chunk->square;
        for (unsigned a = 0; a < COLUMNS; a++) {
            total.with_change[a] += chunk->with_change[a];
            total.with_newest[a] += chunk->with_newest[a];
        }
    }
    return total;
}

/* The products of the newest column with all are new, the others are known. */
static void take_products(const struct step *step, const struct sums *sums)
{
    struct windrow_mixing_state *state = &step->mixing->state;
    for (unsigned a = 0; a < step->columns; a++)
        state->gram[step->slots[a]][step->slots[0]] = state->gram[step->slots[0]][step->slots[a]] = sums->with_newest[a];
}

/* Least squares through the normal equations, scaled to a unit diagonal, by Cholesky's method. A column
 * that is nearly a combination of newer ones is left out. Returns the square of the norm that remains. */
static double solve(struct step *step, const struct sums *sums)
{
    double (*gram)[COLUMNS] = step->mixing->state.gram;
    double factor[COLUMNS][COLUMNS] = {{0}}, right[COLUMNS] = {0}, scale[COLUMNS], remains = sums->square;
    bool used[COLUMNS] = {false};
    for (unsigned a = 0; a < step->columns; a++) {
        double square = gram[step->slots[a]][step->slots[a]];
        scale[a] = square > 0 ? 1 / sqrt(square) : 0;
        double pivot = 1, value = sums->with_change[a] * scale[a];
        for (unsigned b = 0; b < a; b++) {
            if (!used[b])
                continue;
            double entry = gram[step->slots[a]][step->slots[b]] * scale[a] * scale[b];
            for (unsigned c = 0; c < b; c++)
                entry -= factor[a][c] * factor[b][c];
            factor[a][b] = entry / factor[b][b];
            pivot -= factor[a][b] * factor[a][b];
            value -= factor[a][b] * right[b];
        }
        used[a] = scale[a] > 0 && pivot > 1e-9;
        if (!used[a]) {
            memset(factor[a], 0, sizeof factor[a]);
            continue;
        }
        factor[a][a] = sqrt(pivot);
        right[a] = value / factor[a][a];
        remains -= right[a] * right[a];
    }
    for (unsigned a = step->columns; a-- > 0;) {
        double value = right[a];
        for (unsigned b = a + 1; b < step->columns; b++)
            value -= factor[b][a] * step->gamma[b];
        step->gamma[a] = used[a] ? value / factor[a][a] : 0;
    }
    for (unsigned a = 0; a < step->columns; a++)
        step->gamma[a] *= scale[a];
    return fmax(remains, 0);
}

static inline __attribute__((always_inline)) void mix(const struct step *step, unsigned columns, uint64_t first, uint64_t end)
{
    struct windrow_mixing *mixing = step->mixing;
    float *next_change = mixing->change_columns[step->next], *next_value = mixing->value_columns[step->next];
    const float *column[COLUMNS];
    double gamma[COLUMNS];
    for (unsigned a = 0; a < columns; a++) {
        column[a] = mixing->value_columns[step->slots[a]];
        gamma[a] = step->gamma[a];
    }
    for (uint64_t i = first; i < end; i++) {
        double shift = 0, f = mixing->change[i], value = step->values[i], degree = mixing->degrees[i];
        for (unsigned a = 0; a < columns; a++)
            shift += gamma[a] * column[a][i];
        double mixed = value - shift, floor = step->floors ? step->floor * step->floors[i] : step->floor;
        if (mixed * degree < floor)
            mixed = floor / degree;
        next_change[i] = (float)f;
        next_value[i] = (float)((mixed - value) + f);
        step->values[i] = mixed;
    }
}

static enum windrow_status mix_task(void *context, uint64_t chunk, unsigned worker)
{
    (void)worker;
    const struct step *step = context;
    uint64_t first = chunk * WINDROW_MIXING_CHUNK, end = chunk_end(step->mixing, chunk);
    if (step->columns == COLUMNS)
        mix(step, COLUMNS, first, end);
    else
        mix(step, step->columns, first, end);
    release(step->mixing, first, end);
    return WINDROW_OK;
}

enum windrow_status windrow_mixing_step(struct windrow_mixing *mixing, struct windrow_crew *crew, double *values,
                                        double floor, const double *floors, bool mix, struct windrow_mixing_result *result)
{
    uint64_t chunk_count = (mixing->pages + WINDROW_MIXING_CHUNK - 1) / WINDROW_MIXING_CHUNK;
    struct step step = {.mixing = mixing, .values = values, .floor = floor, .floors = floors};
    struct windrow_mixing_state *state = &mixing->state;
    step.chunks = malloc((chunk_count + 1) * sizeof *step.chunks);
    if (!step.chunks)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while mixing sweeps");
    if (!mix)
        *state = (struct windrow_mixing_state){0};
    if (state->pending) {
        state->newest = (state->newest + 1) % COLUMNS;
        step.fresh = true;
        state->columns += state->columns < COLUMNS;
        state->pending = 0;
    }
    step.columns = state->columns;
    for (unsigned a = 0; a < step.columns; a++)
        step.slots[a] = (state->newest + COLUMNS - a) % COLUMNS;
    enum windrow_status status = windrow_crew_run(crew, chunk_count, measure_task, &step);
    if (status)
        goto out;
    struct sums sums = add_chunks(&step, chunk_count);
    *result = (struct windrow_mixing_result){.change_l1 = sums.change_l1, .change_relative = sums.change_relative, .fall = 1};
    if (mix) {
        if (step.fresh)
            take_products(&step, &sums);
        double remains = solve(&step, &sums);
        result->fall = sums.square > 0 ? sqrt(remains / sums.square) : 1;
        step.next = (state->newest + 1) % COLUMNS;
        status = windrow_crew_run(crew, chunk_count, mix_task, &step);
        state->pending = 1;
    }
out:
    free(step.chunks);
    return status;
}
