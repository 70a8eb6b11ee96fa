/* part: the page merge, one key range at a time.
 *
 * The key runs of all batches are merged into the sorted list of distinct pages. The key space is cut
 * into parts at keys sampled from the runs' indexes, so that parts hold about the same number of
 * entries and can be merged by different workers; a part's page numbers count from 0, and are raised
 * by the pages of the parts before it once those are known.
 *
 * Both a run and the merged list are sorted in host order, so a batch's map from local ids to pages is
 * increasing: it is stored as gaps and read forward. A part leaves in the scratch directory
 *   part-N          key run of its pages, with out-degrees summed over batches (links repeated in
 *                   different batches are counted twice here, and subtracted after the link merge)
 *   part-N.maps     for each run in turn, its map within the part (frames, cut between runs)
 *   part-N.facts    struct windrow_part_facts, then of each run the offset of its map
 */
#ifndef WINDROW_SHARD_PART_H
#define WINDROW_SHARD_PART_H

#include "shard/keyrun.h"

struct windrow_part_facts {
    uint64_t pages;
    uint64_t core_pages;
    uint64_t run_count;
};

/* The cuts between parts. */
struct windrow_part_plan {
    struct windrow_buffer keys;
    uint64_t *key_at;       /* part_count + 1 of them: part p holds keys from that of p (none for 0) up to that of p + 1 */
    uint64_t part_count;
};

/* Entries of a part, about; so that its maps fit in memory while they are made. */
#define WINDROW_PART_ENTRIES (1u << 20)

/* Plans the parts of the page merge of `run_count` runs, named batch-N.keys in `scratch`. */
enum windrow_status windrow_part_plan(const char *scratch, uint64_t run_count, struct windrow_part_plan *plan);
void windrow_part_plan_free(struct windrow_part_plan *plan);

/* Merges one part; durable but for its names. Threads: different parts at the same time. */
enum windrow_status windrow_part_merge(const char *scratch, uint64_t run_count, const struct windrow_part_plan *plan, uint64_t part);

enum windrow_status windrow_part_facts_load(const char *scratch, uint64_t part, struct windrow_part_facts *facts);

/* Reads a run's map, all parts of it: pages[l] and cores[l] become the page id and the core number of local id l
 * (of a page that is no core page, cores[l] is UINT64_MAX). page_bases and core_bases: of each part. */
enum windrow_status windrow_part_map_load(const char *scratch, uint64_t part_count, const uint64_t *page_bases, const uint64_t *core_bases,
                                          uint64_t run, uint64_t local_count, uint64_t *pages, uint64_t *cores);

/* Memory that merging a part takes with so many runs. */
uint64_t windrow_part_memory_bytes(uint64_t run_count);

#endif
