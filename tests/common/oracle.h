/* oracle: the judge. PageRank computed twice over in long double, as plainly as it can be written:
 * by the power iteration that defines it and by Gaussian elimination. It shares no code with the
 * library; oracle_unit.c holds it against published values.
 *
 * Links count as often as they are listed and self links count: tidy the graph first (graph.h)
 * where the link rules shall hold.
 */
#ifndef TESTS_COMMON_ORACLE_H
#define TESTS_COMMON_ORACLE_H

#include "graph.h"

struct oracle_question {
    const struct graph *graph;
    long double beta;              /* chance to follow a link, 0 < beta < 1; 1 for oracle_solve() only */
    const long double *jump;       /* jump vector, sum 1; NULL: uniform */
    const long double *dangling;   /* where a page without links sends the surfer, sum 1; NULL: uniform */
};

/* Power iteration from the jump vector. After k sweeps its L1 error is at most 2·beta^k, and k is
 * chosen for 2e-19. `scores` has one entry a page; they sum to 1. */
void oracle_power(const struct oracle_question *question, long double *scores);

/* One power sweep: next = (1 − beta)·jump + beta·(Pᵀ·scores + dangling mass). */
void oracle_sweep(const struct oracle_question *question, const long double *scores, long double *next);

/* Gaussian elimination with partial pivoting on (I − beta·Q)·x = (1 − beta)·jump; with beta = 1 one
 * equation is replaced by Σx = 1, which needs a web whose pages all reach each other. Cubic in the
 * pages: for a few hundred at most. */
void oracle_solve(const struct oracle_question *question, long double *scores);

/* Σ |a_i − b_i|. */
long double oracle_distance(const long double *a, const long double *b, size_t page_count);

#endif
