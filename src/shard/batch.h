/* batch: as many pages and links of a dump as fit in memory, turned into two sorted runs.
 *
 * A batch is filled link by link: a hash table gives each page key a small local id in the order of
 * appearance, and links are kept as lists of local ids. windrow_batch_write() sorts the keys in host
 * order, renumbers the links accordingly, sorts them by (target, source), drops repeated links, and
 * writes a key run (shard/keyrun.h, with out-degrees) and a link run (shard/linkrun.h, in the new
 * local ids, which count up in host order). Nothing is looked up at random outside of the batch.
 *
 * Threads: each worker has a batch of its own.
 */
#ifndef WINDROW_SHARD_BATCH_H
#define WINDROW_SHARD_BATCH_H

#include "base/error.h"

struct windrow_batch;

/* A batch that, with all that writing it needs, stays within memory_bytes. */
enum windrow_status windrow_batch_create(uint64_t memory_bytes, struct windrow_batch **batch);
void windrow_batch_destroy(struct windrow_batch *batch); /* NULL is fine */

/* True when it is time to write: one more line of ordinary length still fits. */
bool windrow_batch_full(const struct windrow_batch *batch);
bool windrow_batch_empty(const struct windrow_batch *batch);

/* Begins the links of a page that was crawled. */
enum windrow_status windrow_batch_source(struct windrow_batch *batch, const char *key, size_t key_bytes);

/* Collects a link from the current source; `*self` tells that it points there and was left out. Targets
 * are looked up a few at a time, so a caller finishes each line with windrow_batch_line_end(). */
enum windrow_status windrow_batch_target(struct windrow_batch *batch, const char *key, size_t key_bytes, bool *self);
enum windrow_status windrow_batch_line_end(struct windrow_batch *batch);

struct windrow_batch_counts {
    uint64_t pages;
    uint64_t links;       /* distinct */
    uint64_t duplicates;  /* repeated links left out */
};

/* Sorts and writes the two runs, durable but for their names, and empties the batch. */
enum windrow_status windrow_batch_write(struct windrow_batch *batch, const char *key_path, const char *link_path,
                                        struct windrow_batch_counts *counts);

#endif
