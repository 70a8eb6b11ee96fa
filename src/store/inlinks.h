/* inlinks: every in-link of a store, target by target.
 *
 * For all who want to see the links once and in order, and not to rank: growing a store, checking it,
 * explaining a score. A cursor goes through the targets of one kind (store/block.h) by their numbers.
 *
 * Threads: a cursor belongs to one thread; any number of cursors may go through one store.
 */
#ifndef WINDROW_STORE_INLINKS_H
#define WINDROW_STORE_INLINKS_H

#include "store/store.h"

struct windrow_inlinks {
    const struct windrow_store *store;
    enum windrow_block_kind kind;
    uint64_t next_block;
    uint32_t position;                /* of the next list in the decoded block */
    uint64_t source_at;
    struct windrow_block_reader reader;
    struct windrow_lists lists;
    const struct windrow_block_record *record;
    /* the current list, or a part of it */
    bool ended;                       /* there is none: all targets were seen */
    uint64_t target;                  /* core or rim number */
    const uint64_t *sources;          /* core numbers, ascending; valid until the next call */
    uint64_t count;                   /* 0 for a target without in-links */
    bool more;                        /* the next call goes on with this target */
};

/* Begins at the first target of a block (0: of the store). */
void windrow_inlinks_begin(struct windrow_inlinks *inlinks, const struct windrow_store *store, enum windrow_block_kind kind, uint64_t first_block);
enum windrow_status windrow_inlinks_next(struct windrow_inlinks *inlinks);
void windrow_inlinks_end(struct windrow_inlinks *inlinks);

#endif
