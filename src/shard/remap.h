/* remap: a batch's links, from its local ids to page ids and core numbers.
 *
 * A batch's maps increase, so a run sorted by (target, source) stays sorted: this is one reading and one
 * writing of the run with the maps of one batch in memory. The rewritten run's frames end at segment
 * borders, and its index says where each segment begins, so that the link merge can work on any segment.
 *   batch-N.sorted        link run: targets are page ids, sources core numbers
 *   batch-N.sorted.index  struct windrow_remap_mark of each segment that has links, then one with the file's end
 */
#ifndef WINDROW_SHARD_REMAP_H
#define WINDROW_SHARD_REMAP_H

#include "base/file.h"

struct windrow_remap_mark {
    uint64_t segment; /* UINT64_MAX in the last mark */
    uint64_t offset;
};

struct windrow_remap_parts {
    const char *scratch;
    uint64_t part_count;
    const uint64_t *page_bases;
    const uint64_t *core_bases;
};

/* Rewrites one batch of `local_pages` pages; durable. Takes 16 bytes of memory a local page. Threads: different batches. */
enum windrow_status windrow_remap_run(const struct windrow_remap_parts *parts, uint64_t run, uint64_t local_pages);

/* Where a rewritten run's links into a segment stand; begin == end when there are none. */
enum windrow_status windrow_remap_segment(const char *scratch, uint64_t run, uint64_t segment, uint64_t *begin, uint64_t *end);

#endif
