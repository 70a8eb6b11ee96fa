/* witness: PageRank by the C library igraph (its prpack solver). A witness, not the judge: on large
 * webs prpack was seen several 1e-9 off in L1, so its word is held against the judge's too.
 */
#ifndef TESTS_OUTSIDE_WITNESS_H
#define TESTS_OUTSIDE_WITNESS_H

#include "../common/graph.h"

/* Fills one score a page; the jump vector is uniform, and dangling pages jump uniformly. A failure
 * of igraph fails the running test. */
void witness_rank(const struct graph *graph, double beta, long double *scores);

#endif
