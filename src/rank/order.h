/* order: all pages by falling score, equal scores by rising page id (which is host order).
 *
 * A run's order file answers three questions without reading the scores again: which pages come first
 * (a prefix), at which place a page stands, and how many pages have more than a given score. It is made
 * once, when a vector is certified, by an external sort within a memory budget.
 *
 * Places count from 1 at this room's door as everywhere else.
 * Threads: an open order may be read from any thread. Durability: the file is written aside, synced and
 * renamed, and its directory synced: under its name it is whole or not there at all.
 */
#ifndef WINDROW_RANK_ORDER_H
#define WINDROW_RANK_ORDER_H

#include "base/file.h"
#include "base/meter.h"

/* Scores between two samples: one memory page of them, so that a search touches no more than one. */
enum { WINDROW_ORDER_STRIDE = 512 };

/* Least memory that a sort can work in; a smaller budget is taken as this. */
#define WINDROW_ORDER_MEMORY_LEAST (UINT64_C(1) << 20)

/* Sorts a vector of scores into the file `path`.
 *
 * scores_path    file of doubles in the machine's (little-endian) order, by page id
 * scores_offset  byte at which the first of them stands
 * memory_bytes   most memory for the sort; scratch of 16 bytes a page goes beside `path`, unnamed
 * meter          counts two units a page (sorted, merged) and carries the wish to stop; may be NULL
 *
 * The same scores give the same bytes for any memory and threads. WINDROW_DAMAGED: the file ends early
 * or holds a score that is negative or not a number; WINDROW_RESOURCE; WINDROW_STOPPED, nothing left behind. */
enum windrow_status windrow_order_build(const char *scores_path, uint64_t scores_offset, uint64_t pages,
                                        uint64_t memory_bytes, unsigned threads, const char *path, struct windrow_meter *meter);

struct windrow_order;

/* Opens an order and checks its header and size, not its contents. `pages` is the number it must have.
 * WINDROW_DAMAGED otherwise. */
enum windrow_status windrow_order_open(const char *path, uint64_t pages, struct windrow_order **order);
void windrow_order_close(struct windrow_order *order); /* NULL is fine */

uint64_t windrow_order_pages(const struct windrow_order *order);

/* The page and the score at a place, 1 <= place <= pages. A damaged file may hold any number: the caller
 * checks the page before using it as an index. */
uint64_t windrow_order_page(const struct windrow_order *order, uint64_t place);
double windrow_order_score(const struct windrow_order *order, uint64_t place);

/* True for a score that belongs in front. Once false for a score it must be false for every lower one. */
typedef bool (*windrow_order_belongs)(const void *context, double score);

/* How many pages, from the first place on, belong in front. The search starts at `near_place`
 * (1 <= near_place <= pages): the nearer the result, the fewer scores are looked at. */
uint64_t windrow_order_count(const struct windrow_order *order, windrow_order_belongs belongs, const void *context, uint64_t near_place);

/* Pages with a score greater than `score`. */
uint64_t windrow_order_above(const struct windrow_order *order, double score);
/* Pages with at least this score. */
uint64_t windrow_order_reaching(const struct windrow_order *order, double score);
/* The place of a page whose score is `score`; 0 when the order does not hold it. */
uint64_t windrow_order_place(const struct windrow_order *order, double score, uint64_t page);

/* Reads everything back: checksums, that scores fall and ids rise among equal scores, that each page has
 * the score that `scores` (by page id) gives it. WINDROW_DAMAGED with the first fault as message. */
enum windrow_status windrow_order_verify(const struct windrow_order *order, const double *scores);

#endif
