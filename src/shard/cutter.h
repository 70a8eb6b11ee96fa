/* cutter: cuts a segment's in-lists into blocks and writes them.
 *
 * Where the cuts fall depends on nothing but the lists: a block ends before a new host once it has three
 * quarters of WINDROW_CUTTER_LINKS, within a host once it has five quarters, or at WINDROW_CUTTER_TARGETS
 * targets. A list longer than WINDROW_CUTTER_LINKS becomes pieces of that length, in blocks of their own.
 *
 * Call windrow_cutter_list() once for every target of the kind, in order, then windrow_cutter_sources()
 * as often as needed; a list may stay empty. Threads: one cutter belongs to one thread.
 */
#ifndef WINDROW_SHARD_CUTTER_H
#define WINDROW_SHARD_CUTTER_H

#include "store/block.h"

#include <zstd.h>

#define WINDROW_CUTTER_LINKS (1u << 17)
#define WINDROW_CUTTER_TARGETS (1u << 16)

struct windrow_cutter {
    enum windrow_block_kind kind;
    uint32_t segment;
    struct windrow_writer file;
    struct windrow_buffer records;    /* struct windrow_block_record, of the blocks written */
    uint64_t links;                   /* written or waiting */

    uint64_t first_target;            /* of the waiting block */
    uint32_t target_count;
    struct windrow_buffer sources;    /* uint64_t */
    struct windrow_buffer counts;     /* uint32_t a target */
    struct windrow_buffer host_first; /* uint64_t a target: its host's core numbers are [host_first, host_end) */
    struct windrow_buffer host_end;
    uint64_t closed_links;            /* links of the waiting block's finished lists */
    bool in_pieces;                   /* the current list is being written in pieces */
    struct windrow_buffer payload, frame;
    ZSTD_CCtx *compressor;
};

enum windrow_status windrow_cutter_open(struct windrow_cutter *cutter, enum windrow_block_kind kind, uint32_t segment, uint64_t first_target,
                                        const char *path);
/* Begins the next target's list. */
enum windrow_status windrow_cutter_list(struct windrow_cutter *cutter, uint64_t host_first, uint64_t host_end);
/* Adds sources, ascending and beyond those already added to this list. */
enum windrow_status windrow_cutter_sources(struct windrow_cutter *cutter, const uint64_t *sources, size_t count);
/* Ends the last block and the file, durably. The records stay until windrow_cutter_free(). */
enum windrow_status windrow_cutter_finish(struct windrow_cutter *cutter, uint64_t *bytes, uint64_t *checksum);
void windrow_cutter_free(struct windrow_cutter *cutter);

#endif
