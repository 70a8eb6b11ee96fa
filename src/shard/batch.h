/* batch: as many pages and links of a dump as fit in memory, turned into two sorted runs.
 *
 * A batch is filled link by link: a hash table gives each page key a small local id in the order of
 * appearance, and links are kept as lists of local ids. windrow_batch_write() sorts the keys in host
 * order, renumbers the links accordingly, sorts them by (target, source), drops repeated links, and
 * writes a key run (shard/keyrun.h, with out-degrees) and a link run (shard/linkrun.h, in the new
 * local ids, which count up in host order). Nothing is looked up at random outside of the batch.
 *
 * While it is written, a batch also brings its pages to what they stand for (shard/fold.h): numbers of a dump of ids
 * to the pages that they name, aliases to what they are folded into, and pages to be taken down to nothing. The tables
 * for that are sorted as the batch's keys are, and read front to back beside them.
 *
 * Threads: each worker has a batch of its own.
 */
#ifndef WINDROW_SHARD_BATCH_H
#define WINDROW_SHARD_BATCH_H

#include "shard/fold.h"

struct windrow_batch;

/* A batch that, with all that writing it needs, stays within memory_bytes. `fold`: what its pages are brought to, the
 * caller's, kept as long as the batch; NULL: they stay as they are, and no ids are allowed. */
enum windrow_status windrow_batch_create(uint64_t memory_bytes, const struct windrow_fold *fold, struct windrow_batch **batch);
void windrow_batch_destroy(struct windrow_batch *batch); /* NULL is fine */

/* True when it is time to write: one more line of ordinary length still fits. */
bool windrow_batch_full(const struct windrow_batch *batch);
bool windrow_batch_empty(const struct windrow_batch *batch);

/* Says where in the dumps the fields that follow stand, for messages about ids without a name. */
void windrow_batch_place(struct windrow_batch *batch, uint64_t file, uint64_t line);

/* Begins the links of a page that was crawled. Keys of pages (url/key.h) and of ids (shard/names.h) may stand in one batch. */
enum windrow_status windrow_batch_source(struct windrow_batch *batch, const char *key, size_t key_bytes);

/* Collects a link from the current source; `*self` tells that it points there and was left out (ids are looked at when
 * the batch is written). Targets are looked up a few at a time, so a caller finishes each line with windrow_batch_line_end(). */
enum windrow_status windrow_batch_target(struct windrow_batch *batch, const char *key, size_t key_bytes, bool *self);
enum windrow_status windrow_batch_line_end(struct windrow_batch *batch);

struct windrow_batch_counts {
    uint64_t pages;
    uint64_t links;       /* distinct */
    uint64_t duplicates;  /* repeated links left out */
    uint64_t dropped[WINDROW_DROP_COUNT]; /* links left out while folding; duplicates are not among them */
    uint64_t bad_fields;  /* ids without a name */
};

/* Folds, sorts and writes the two runs, durable but for their names, and empties the batch. `unnamed` (may be NULL) is
 * called for each id that has no name; its failure ends the writing. After folding, the runs may hold no page at all. */
enum windrow_status windrow_batch_write(struct windrow_batch *batch, const char *key_path, const char *link_path, windrow_fold_unnamed unnamed,
                                        void *context, struct windrow_batch_counts *counts);

#endif
