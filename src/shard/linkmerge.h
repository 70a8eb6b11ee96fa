/* linkmerge: every page's in-links, from all batches, one segment at a time, straight into blocks.
 *
 * The rewritten runs are read at the segment's place and merged by target, then by source; a link found in
 * more than one batch is kept once. Each segment leaves
 *   STORE/links/N.core.zst, N.rim.zst   its blocks
 *   segment-N.links                     in the scratch directory: struct windrow_linkmerge_head, the block records
 *                                       (core, then rim), and the inside out-degrees (uint32_t by core number,
 *                                       from the segment's first core page on) as far as this segment saw them
 *   segment-N.corrections               uint64_t: source × 2 for a link repeated across batches, source × 2 + 1 for
 *                                       a link inside a host whose source lies in another segment
 * From these, windrow_linkmerge_degrees() makes the files degrees and inside-degrees.
 */
#ifndef WINDROW_SHARD_LINKMERGE_H
#define WINDROW_SHARD_LINKMERGE_H

#include "base/meter.h"
#include "store/layout.h"

struct windrow_linkmerge_head {
    uint64_t links;
    uint64_t core_links;
    uint64_t duplicates;      /* links repeated across batches */
    uint64_t block_counts[WINDROW_BLOCK_KINDS];
    uint64_t file_bytes[WINDROW_BLOCK_KINDS];
    uint64_t file_checksums[WINDROW_BLOCK_KINDS];
    uint64_t core_pages;
};

struct windrow_linkmerge {
    const char *scratch;
    const char *store;
    uint64_t run_count;
    uint64_t pages;
    uint64_t core_pages;
    uint64_t segment_count;
    const uint64_t *segment_cores;               /* core pages before each segment; segment_count + 1 */
    const struct windrow_core_group *core_groups; /* the store's core-map */
    const struct windrow_host_record *hosts;      /* the store's hosts, the record of totals last */
    uint64_t host_count;
    struct windrow_meter *meter;
};

/* Merges one segment; durable. Threads: different segments at the same time. */
enum windrow_status windrow_linkmerge_segment(const struct windrow_linkmerge *merge, uint64_t segment);

/* Loads what a segment left; `records` receives the block records of both kinds. */
enum windrow_status windrow_linkmerge_head(const char *scratch, uint64_t segment, struct windrow_linkmerge_head *head, struct windrow_buffer *records);

/* Writes STORE/degrees and STORE/inside-degrees; `memory_bytes` bounds what it takes (8 bytes a core page in one go,
 * else in several passes over the corrections). Can be done again. */
enum windrow_status windrow_linkmerge_degrees(const struct windrow_linkmerge *merge, uint64_t memory_bytes);

/* Memory that merging a segment takes with so many runs. */
uint64_t windrow_linkmerge_memory_bytes(uint64_t run_count);

#endif
