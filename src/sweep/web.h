/* web: the links between pages as a sweep sees them, wherever they come from.
 *
 * A sweep needs the core's degrees, where its hosts begin, and its blocks one after another. A store gives
 * all of that (windrow_web_of_store()); a test gives it from memory.
 *
 * Threads: all functions may be called from any thread, with a reader each.
 */
#ifndef WINDROW_SWEEP_WEB_H
#define WINDROW_SWEEP_WEB_H

#include "store/store.h"

struct windrow_web {
    uint64_t pages;
    uint64_t core_pages;              /* pages with an out-link; the rim is the rest */
    uint64_t links[WINDROW_BLOCK_KINDS];
    const uint32_t *degrees;          /* out-links of each core page, at least 1 */
    const uint32_t *inside_degrees;   /* of these, to core pages of the same host */
    uint64_t host_count;
    uint64_t block_count[WINDROW_BLOCK_KINDS];

    const void *context;
    /* First core number of a host; host <= host_count, the one behind the last gives core_pages. */
    uint64_t (*host_first_core)(const void *context, uint64_t host);
    const struct windrow_block_record *(*record)(const void *context, enum windrow_block_kind kind, uint64_t block);
    /* The block is valid until the reader's next use. */
    enum windrow_status (*read)(const void *context, enum windrow_block_kind kind, uint64_t block,
                                struct windrow_block_reader *reader, struct windrow_block *out);
    /* Lets go of the memory of a stretch of the degrees, which come back from their file when they are looked at again.
     * NULL: they are no mapped file. */
    void (*release)(const void *memory, uint64_t bytes);
};

/* The store must stay open as long as the web is used. */
void windrow_web_of_store(const struct windrow_store *store, struct windrow_web *web);

/* WINDROW_DAMAGED unless the blocks of each kind cover its targets one after another without a gap, their
 * links add up, pieces stand beside each other and hosts ascend. What a sweep relies on. */
enum windrow_status windrow_web_check(const struct windrow_web *web);

#endif
