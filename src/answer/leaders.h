/* leaders: the first places of a group of pages, with their ranges within the group.
 *
 * The group is any set of page ranges. It is read twice, front to back: once for its leaders, once to
 * count the pages that might overtake them. Memory grows with the number of leaders, not with the group.
 * Threads: nothing but the arguments is touched.
 */
#ifndef WINDROW_ANSWER_LEADERS_H
#define WINDROW_ANSWER_LEADERS_H

#include "answer/place.h"

/* Pages first … end - 1. */
struct windrow_span {
    uint64_t first;
    uint64_t end;
};

struct windrow_leader {
    uint64_t page;
    double score;
    struct windrow_range range;
};

/* All zero at first; reused from group to group. */
struct windrow_leaders {
    struct windrow_leader *leaders; /* best first, equal scores by page id */
    uint64_t count;
    struct windrow_buffer leader_room;
    struct windrow_buffer bounds_room;
};

/* Finds the `most` pages with the highest scores, or all when there are fewer.
 *
 * scores  by page id
 * spans   the group: not overlapping, in page order
 */
enum windrow_status windrow_leaders_find(const double *scores, const struct windrow_span *spans, size_t span_count, uint64_t most,
                                         const struct windrow_bounds *bounds, struct windrow_leaders *leaders);
void windrow_leaders_free(struct windrow_leaders *leaders);

#endif
