#include "rank/mixing.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

enum { COLUMNS = WINDROW_MIXING_COLUMNS };

/* The sums over one chunk, and over all. */
struct sums {
    double change_l1, change_relative;
    double square;                 /* f with f */
    double with_change[COLUMNS];   /* dF_j with f */
    double gram[COLUMNS][COLUMNS]; /* dF_i with dF_j, i >= j */
};

struct step {
    struct windrow_mixing *mixing;
    double *values;
    double floor;
    const double *floors;
    struct sums *chunks;
    unsigned slots[COLUMNS];   /* columns to use, newest first */
    unsigned columns;
    int fresh;                 /* column that is completed in this step, or -1 */
    unsigned next;             /* column that is begun in this step */
    double gamma[COLUMNS];
};

static uint64_t chunk_end(const struct windrow_mixing *mixing, uint64_t chunk)
{
    uint64_t end = (chunk + 1) * WINDROW_MIXING_CHUNK;
    return end < mixing->pages ? end : mixing->pages;
}

static enum windrow_status measure_task(void *context, uint64_t chunk, unsigned worker)
{
    (void)worker;
    struct step *step = context;
    struct windrow_mixing *mixing = step->mixing;
    struct sums sums = {0};
    const float *change = mixing->change;
    float *fresh_change = step->fresh >= 0 ? mixing->change_columns[step->fresh] : NULL;
    float *fresh_value = step->fresh >= 0 ? mixing->value_columns[step->fresh] : NULL;
    for (uint64_t i = chunk * WINDROW_MIXING_CHUNK; i < chunk_end(mixing, chunk); i++) {
        double f = change[i], value = step->values[i], size = fabs(f);
        sums.change_l1 += size * mixing->degrees[i];
        if (size > sums.change_relative * value)
            sums.change_relative = size / value;
        if (fresh_change) {
            fresh_change[i] = change[i] - fresh_change[i];
            fresh_value[i] += fresh_change[i];
        }
        double weight = value > 0 ? mixing->degrees[i] / value : 0;
        sums.square += weight * f * f;
        for (unsigned a = 0; a < step->columns; a++) {
            double column = weight * mixing->change_columns[step->slots[a]][i];
            sums.with_change[a] += column * f;
            for (unsigned b = 0; b <= a; b++)
                sums.gram[a][b] += column * mixing->change_columns[step->slots[b]][i];
        }
    }
    step->chunks[chunk] = sums;
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
            for (unsigned b = 0; b <= a; b++)
                total.gram[a][b] += chunk->gram[a][b];
        }
    }
    return total;
}

/* Least squares through the normal equations, scaled to a unit diagonal, by Cholesky's method. A column
 * that is nearly a combination of newer ones is left out. Returns the square of the norm that remains. */
static double solve(struct step *step, const struct sums *sums)
{
    double factor[COLUMNS][COLUMNS] = {{0}}, right[COLUMNS] = {0}, scale[COLUMNS], remains = sums->square;
    bool used[COLUMNS] = {false};
    for (unsigned a = 0; a < step->columns; a++) {
        scale[a] = sums->gram[a][a] > 0 ? 1 / sqrt(sums->gram[a][a]) : 0;
        double pivot = 1, value = sums->with_change[a] * scale[a];
        for (unsigned b = 0; b < a; b++) {
            if (!used[b])
                continue;
            double entry = sums->gram[a][b] * scale[a] * scale[b];
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

static enum windrow_status mix_task(void *context, uint64_t chunk, unsigned worker)
{
    (void)worker;
    struct step *step = context;
    struct windrow_mixing *mixing = step->mixing;
    float *next_change = mixing->change_columns[step->next], *next_value = mixing->value_columns[step->next];
    for (uint64_t i = chunk * WINDROW_MIXING_CHUNK; i < chunk_end(mixing, chunk); i++) {
        double shift = 0, f = mixing->change[i], value = step->values[i];
        for (unsigned a = 0; a < step->columns; a++)
            shift += step->gamma[a] * mixing->value_columns[step->slots[a]][i];
        double floor = (step->floors ? step->floor * step->floors[i] : step->floor) / mixing->degrees[i];
        double mixed = value - shift;
        mixed = mixed > floor ? mixed : floor;
        next_change[i] = (float)f;
        next_value[i] = (float)((mixed - value) + f);
        step->values[i] = mixed;
    }
    return WINDROW_OK;
}

enum windrow_status windrow_mixing_step(struct windrow_mixing *mixing, struct windrow_crew *crew, double *values,
                                        double floor, const double *floors, bool mix, struct windrow_mixing_result *result)
{
    uint64_t chunk_count = (mixing->pages + WINDROW_MIXING_CHUNK - 1) / WINDROW_MIXING_CHUNK;
    struct step step = {.mixing = mixing, .values = values, .floor = floor, .floors = floors, .fresh = -1};
    struct windrow_mixing_state *state = &mixing->state;
    step.chunks = malloc((chunk_count + 1) * sizeof *step.chunks);
    if (!step.chunks)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while mixing sweeps");
    if (!mix)
        *state = (struct windrow_mixing_state){0};
    if (state->pending) {
        state->newest = (state->newest + 1) % COLUMNS;
        step.fresh = (int)state->newest;
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
