/* order_layout: the bytes of an order file, for the two rooms that write and read it.
 *
 * All numbers little-endian:
 *
 *   offset  bytes  meaning
 *        0      8  "windordr"
 *        8      4  version, 1
 *       12      4  bytes of a page id: 4, or 8 when there are more than 2^32 pages
 *       16      8  pages
 *       24      8  stride: scores for each sample, 512
 *       32      8  XXH3-64 of the ids
 *       40      8  XXH3-64 of the scores
 *       48      8  XXH3-64 of the samples
 *       56      8  XXH3-64 of bytes 0 to 55
 *       64         page ids by place
 *      next multiple of 4096:
 *                  scores by place, doubles
 *      right behind:
 *                  samples: the scores at places 1, 513, 1025, …
 *
 * So a prefix read gives the first pages. A search runs over the samples (a 512th of the scores: they
 * stay in memory) and then over one stride, which is one memory page.
 */
#ifndef WINDROW_RANK_ORDER_LAYOUT_H
#define WINDROW_RANK_ORDER_LAYOUT_H

#include "rank/order.h"

enum { WINDROW_ORDER_HEADER_BYTES = 64, WINDROW_ORDER_VERSION = 1 };

#define WINDROW_ORDER_MAGIC "windordr" /* without its NUL */

struct windrow_order_header {
    char magic[8];
    uint32_t version;
    uint32_t id_bytes;
    uint64_t pages;
    uint64_t stride;
    uint64_t ids_checksum;
    uint64_t scores_checksum;
    uint64_t samples_checksum;
    uint64_t checksum;
};

_Static_assert(sizeof(struct windrow_order_header) == WINDROW_ORDER_HEADER_BYTES, "the header has no holes");

/* Where things stand in a file of so many pages. */
struct windrow_order_layout {
    uint32_t id_bytes;
    uint64_t scores_offset;
    uint64_t samples_offset;
    uint64_t sample_count;
    uint64_t file_bytes;
};

static inline struct windrow_order_layout windrow_order_layout_of(uint64_t pages)
{
    struct windrow_order_layout layout = {.id_bytes = pages > (UINT64_C(1) << 32) ? 8 : 4};
    layout.scores_offset = (WINDROW_ORDER_HEADER_BYTES + pages * layout.id_bytes + 4095) / 4096 * 4096;
    layout.samples_offset = layout.scores_offset + pages * sizeof(double);
    layout.sample_count = (pages + WINDROW_ORDER_STRIDE - 1) / WINDROW_ORDER_STRIDE;
    layout.file_bytes = layout.samples_offset + layout.sample_count * sizeof(double);
    return layout;
}

#endif
