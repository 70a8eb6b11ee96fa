/* place: where a page stands among all pages of a crawl, and which places its certificate leaves possible.
 *
 * Two pages are in proven order when their score intervals do not overlap. So a page's range runs from
 * 1 + the pages that are certainly above it, to all pages less those that are certainly below it. Pages
 * of equal score have equal intervals and share their range.
 *
 * Threads: nothing but the arguments is touched; a windrow_place_memory serves one thread.
 */
#ifndef WINDROW_ANSWER_PLACE_H
#define WINDROW_ANSWER_PLACE_H

#include "rank/order.h"

/* The scores that are left possible for a page that was given `score`: low <= score <= high. Neither end
 * ever falls when the score rises. */
typedef void (*windrow_interval)(const void *certificate, double score, double *low, double *high);

struct windrow_bounds {
    windrow_interval interval;
    const void *certificate;
};

/* Places from 1, both ends included; a proven place has first == last. */
struct windrow_range {
    uint64_t first;
    uint64_t last;
};

/* The range of a page with this score; `near_place` is its place or one near it. */
struct windrow_range windrow_place_range(const struct windrow_order *order, const struct windrow_bounds *bounds,
                                         double score, uint64_t near_place);

/* What was found for the scores met last. Asking for all pages in id order, most of which share their
 * scores with many others, then takes no search for most of them. All zero at first. */
struct windrow_place_memory {
    struct windrow_place_memory_entry *entries;
};

/* The place and range of a page. WINDROW_DAMAGED when the order does not hold the page with this score,
 * WINDROW_RESOURCE when memory is out. */
enum windrow_status windrow_place_find(const struct windrow_order *order, const struct windrow_bounds *bounds,
                                       struct windrow_place_memory *memory, double score, uint64_t page,
                                       uint64_t *place, struct windrow_range *range);
void windrow_place_memory_free(struct windrow_place_memory *memory);

#endif
