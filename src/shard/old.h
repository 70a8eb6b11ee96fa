/* old: an earlier store as one more batch, so that a store can grow.
 *
 * A store is sorted the way a batch is: its pages in host order, its links by (target, source). What the new
 * dumps replace is left out on the way: the links of every page that they fetched again, the pages and
 * hosts that are to be taken down, and then the pages that are left neither fetched nor linked. What comes
 * out is a key run and a link run like those of a batch (shard/batch.h), and the merges do the rest.
 *
 * A page of the store may have become an alias since. Its links, in and out, go through batches, which fold
 * them as they fold those of a dump.
 */
#ifndef WINDROW_SHARD_OLD_H
#define WINDROW_SHARD_OLD_H

#include "base/meter.h"
#include "shard/fold.h"
#include "store/store.h"

struct windrow_old_counts {
    uint64_t runs;    /* written: the store's own and those of its pages that became aliases */
    uint64_t links;   /* in all of them */
};

/* Writes batch-N.keys and batch-N.links, N = run, and as many more as `counts` says, from an open store; durable but for their names.
 *
 * scratch, run       where the new batches' key runs 0 … run − 1 stand, and the number of the first run to write
 * fold               the job's aliases and takedowns, prepared
 * run_pages          receives the pages of each run written (uint64_t)
 * memory_bytes       what may be taken; WINDROW_RESOURCE when the store needs more (12 bytes a core page, 2 bits a page)
 * meter              counts links, twice over; may be NULL
 */
enum windrow_status windrow_old_write(const struct windrow_store *store, const char *scratch, uint64_t run, const struct windrow_fold *fold,
                                      uint64_t memory_bytes, struct windrow_meter *meter, struct windrow_buffer *run_pages,
                                      struct windrow_old_counts *counts);

#endif
