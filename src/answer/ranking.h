/* ranking: a store and the scores of one of its runs, opened together to answer from.
 * The public side is in windrow.h; this is what the rooms of the answer floor share.
 */
#ifndef WINDROW_ANSWER_RANKING_H
#define WINDROW_ANSWER_RANKING_H

#include "answer/place.h"
#include "rank/run.h"
#include "store/store.h"

struct windrow_ranking {
    struct windrow_store *store;
    struct windrow_run *run;
    struct windrow_page_reader *reader;
    const struct windrow_order *order; /* the run's */
    const double *scores;              /* the run's, by page id */
    uint64_t pages;
    struct windrow_bounds bounds;
    struct windrow_place_memory memory;
};

/* A row about a page, but for group, place and URL. */
struct windrow_row windrow_ranking_row(const struct windrow_ranking *ranking, double score, struct windrow_range range);

#endif
