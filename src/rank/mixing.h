/* mixing: Anderson's acceleration of a fixed-point iteration over the core (Anderson 1965; type II as in
 * Walker & Ni 2011, SIAM J. Numer. Anal. 49(4)).
 *
 * With x the values before a sweep, g those after it and f = g - x, the next values are
 * g - sum(gamma_j dG_j), where dF_j and dG_j are the last few differences of f and g between sweeps and
 * gamma minimises the sum of squares of f - sum(gamma_j dF_j), taken over scores (other weights, by 1/score
 * or its square, were tried and needed as many sweeps). The differences of x are known exactly from the
 * mixing itself (dG = dX + dF), so that single precision is enough for the columns.
 *
 * All sums run over chunks of WINDROW_MIXING_CHUNK pages, added in order: the same bytes for any crew.
 */
#ifndef WINDROW_RANK_MIXING_H
#define WINDROW_RANK_MIXING_H

#include "base/crew.h"

enum { WINDROW_MIXING_COLUMNS = 3, WINDROW_MIXING_CHUNK = 65536 };

/* What is kept between sweeps besides the columns. */
struct windrow_mixing_state {
    uint32_t columns;  /* finished ones */
    uint32_t newest;   /* index of the newest finished one */
    uint32_t pending;  /* 1: the next column holds the last f and dX */
    uint32_t reserved;
    double gram[WINDROW_MIXING_COLUMNS][WINDROW_MIXING_COLUMNS]; /* dF_i with dF_j, by index */
};

struct windrow_mixing {
    uint64_t pages;                             /* of the core */
    const uint32_t *degrees;
    float *change;                              /* f, one a page: filled by the sweep */
    float *change_columns[WINDROW_MIXING_COLUMNS];  /* dF */
    float *value_columns[WINDROW_MIXING_COLUMNS];   /* dG */
    struct windrow_mixing_state state;
    /* Called when the work on the pages [first, end) is done for now, from any of the crew's threads. May be NULL. */
    void (*release)(const void *context, uint64_t first, uint64_t end);
    const void *release_context;
};

struct windrow_mixing_result {
    double change_l1;       /* sum of |f| in scores */
    double change_relative; /* largest |f|/value */
    double fall;            /* norm after over norm before, as foreseen; 1 when nothing was mixed */
};

/* After a sweep: measures f, and where `mix` is set changes the values. Afterwards no value is below
 * floor / degree, or floors[i] * floor / degree where floors are given. */
enum windrow_status windrow_mixing_step(struct windrow_mixing *mixing, struct windrow_crew *crew, double *values,
                                        double floor, const double *floors, bool mix, struct windrow_mixing_result *result);

#endif
