/* memory_web: a test's web as sweeps see one, without a store: blocks as small as a test likes, so that
 * waves, pieces of lists and hosts across blocks come up in webs of a few pages. */
#ifndef TESTS_COMMON_MEMORY_WEB_H
#define TESTS_COMMON_MEMORY_WEB_H

#include "graph.h"
#include "sweep/web.h"

struct memory_web {
    struct windrow_web web;
    uint64_t *number;        /* of each page: its core number, or its rim number */
    uint32_t *out_degrees;   /* of each page: core pages are those with any */
    uint64_t *host_firsts;   /* core numbers */
    uint32_t *degrees, *inside_degrees;
    struct windrow_block_record *records[WINDROW_BLOCK_KINDS];
    struct windrow_buffer *payloads[WINDROW_BLOCK_KINDS];
};

/* Blocks take lists until they hold `block_links` links or more; longer lists are cut into pieces.
 * host_of gives the host of each page, 0, 0, 1, 2, 2 …; NULL: all are on one. */
struct memory_web *memory_web_make(const struct graph *graph, uint32_t block_links, const uint32_t *host_of);
void memory_web_free(struct memory_web *web);

#endif
