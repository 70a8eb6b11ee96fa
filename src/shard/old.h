/* old: an earlier store as one more batch, so that a store can grow.
 *
 * A store is sorted the way a batch is: its pages in host order, its links by (target, source). What the new
 * dumps replace is left out on the way: the links of every page that they fetched again, the pages and
 * hosts that are to be taken down, and then the pages that are left neither fetched nor linked. What comes
 * out is a key run and a link run like those of a batch (shard/batch.h), and the merges do the rest.
 */
#ifndef WINDROW_SHARD_OLD_H
#define WINDROW_SHARD_OLD_H

#include "base/meter.h"
#include "store/store.h"

struct windrow_old_counts {
    uint64_t pages;   /* in the run */
    uint64_t links;
};

/* Tells whether a page is to be taken down; `context` is the caller's. */
typedef bool (*windrow_old_dropped)(const void *context, const uint8_t *key, size_t key_bytes);

/* Writes batch-N.keys and batch-N.links, N = run, from an open store; durable but for their names.
 *
 * scratch, run       where the new batches' key runs 0 … run − 1 stand, and the number of the run to write
 * dropped            NULL: nothing is taken down
 * memory_bytes       what may be taken; WINDROW_RESOURCE when the store needs more (12 bytes a core page, 2 bits a page)
 * meter              counts links, twice over; may be NULL
 */
enum windrow_status windrow_old_write(const struct windrow_store *store, const char *scratch, uint64_t run, windrow_old_dropped dropped,
                                      const void *context, uint64_t memory_bytes, struct windrow_meter *meter, struct windrow_old_counts *counts);

#endif
