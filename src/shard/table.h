/* table: from the merged parts to the store's page table, host table and core map.
 *
 * Each segment of 2^18 page ids is written by itself, whichever parts its pages lie in, and leaves
 *   STORE/pages/N.zst    its frames of the page table
 *   segment-N.table      in the scratch directory: counts, index, core bits, out-degrees (see table.c)
 *   segment-N.hosts      its hosts (struct windrow_host_record, first_core and name_at counting from the segment), sealed
 *   segment-N.names      their names, sealed
 * windrow_table_assemble() then strings these together into the flat files of the store, adding what came
 * before each segment.
 */
#ifndef WINDROW_SHARD_TABLE_H
#define WINDROW_SHARD_TABLE_H

#include "base/file.h"

/* Where the pages of all parts lie: part p's pages begin at page_bases[p] (part_count + 1 entries). */
struct windrow_table_parts {
    const char *scratch;
    uint64_t part_count;
    const uint64_t *page_bases;
};

/* Writes one segment; durable. Threads: different segments at the same time. */
enum windrow_status windrow_table_segment(const struct windrow_table_parts *parts, const char *store, uint64_t segment);

struct windrow_table_totals {
    uint64_t pages;
    uint64_t core_pages;
    uint64_t crawled_pages;
    uint64_t hosts;
    uint64_t key_bytes;
};

/* Writes page-index, page-keys, hosts, host-names and core-map into the store, and scratch/raw-degrees (uint32_t by core
 * number, links repeated across batches not yet subtracted). segment_cores[s] becomes the number of core pages before
 * segment s (segment_count + 1 entries). Can be done again. */
enum windrow_status windrow_table_assemble(const char *scratch, const char *store, uint64_t segment_count, uint64_t *segment_cores,
                                           struct windrow_table_totals *totals);

/* Bytes and checksum of a segment's page file. */
enum windrow_status windrow_table_page_file(const char *scratch, uint64_t segment, uint64_t *bytes, uint64_t *checksum);

#endif
