/* block: the in-links of a contiguous range of pages, coded for fast decoding (layout: FORMAT.md).
 *
 * There are two kinds. A core block's targets are core pages, named by their core numbers; a rim
 * block's targets are the dangling pages, named by their rim numbers (both count up in host order).
 * Sources always are core numbers. A list is stored in three parts:
 *   runs   stretches of at least WINDROW_RUN_LEAST consecutive sources (in a core block: near ones only)
 *   near   core blocks only: single sources of the same host that are also targets of this block
 *   far    all other single sources
 * so that a sweep can gather the far ones from the values before the wave, work on the near ones in
 * place, and sum a run without gathering. A list too long for a block is cut into pieces: blocks of one
 * target each, all far and runs (a piece's runs may be far).
 *
 * Numbers in the payload are coded with 0, 1, 2 or 4 bytes each, control bits and data apart; in a
 * wide block, which holds a number of 2^32 or more, with 0, 1, 2 or 8.
 */
#ifndef WINDROW_STORE_BLOCK_H
#define WINDROW_STORE_BLOCK_H

#include "base/file.h"

enum windrow_block_kind { WINDROW_BLOCK_CORE, WINDROW_BLOCK_RIM, WINDROW_BLOCK_KINDS };

enum { WINDROW_RUN_LEAST = 8 };

enum windrow_block_flags {
    WINDROW_BLOCK_WIDE = 1,       /* holds a number of 2^32 or more */
    WINDROW_BLOCK_PIECE = 2,      /* one target; its list goes on in, or comes from, a neighbouring block */
    WINDROW_BLOCK_LAST_PIECE = 4  /* the piece that ends its target's list */
};

/* What the manifest knows of a block. */
struct windrow_block_record {
    uint64_t first_target;  /* core or rim number */
    uint64_t link_count;
    uint64_t offset;        /* of the frame in its file */
    uint64_t checksum;      /* XXH3-64 of the frame's bytes */
    uint32_t target_count;  /* at least 1 */
    uint32_t segment;       /* which block file */
    uint32_t frame_bytes;
    uint32_t payload_bytes; /* after decompression */
    uint32_t flags;
};

/* The parts of a decompressed payload. Pointers point into the payload. */
struct windrow_stream {
    const uint8_t *control; /* 2 bits a number, four to a byte, first number in the low bits */
    const uint8_t *data;
    uint32_t count;         /* numbers */
    uint32_t data_bytes;
};

struct windrow_block {
    uint64_t first_target;
    uint32_t target_count;
    uint32_t flags;
    uint64_t far_base;      /* the first far source's predecessor in the coding of first sources, see FORMAT.md */
    uint64_t near_base;
    uint64_t run_base;
    struct windrow_stream far_counts;  /* far singles of each target; target_count numbers, or none when all 0 */
    struct windrow_stream near_counts;
    struct windrow_stream run_counts;
    struct windrow_stream far_gaps;    /* a list's first source: zigzag difference from the first source of the last
                                        * non-empty list of this part; then source - previous source - 1 */
    struct windrow_stream near_gaps;   /* the same */
    struct windrow_stream runs;        /* per run two numbers: start (first of a list: zigzag difference as above,
                                        * then start - end of the previous run), length - WINDROW_RUN_LEAST */
};

/* One target's sources as the encoder takes them: ascending, distinct. */
struct windrow_block_input {
    enum windrow_block_kind kind;
    uint64_t first_target;
    uint32_t target_count;
    uint32_t flags;               /* PIECE and LAST_PIECE; WIDE is found out */
    const uint64_t *sources;      /* all lists, one after another */
    const uint32_t *counts;       /* sources of each target */
    const uint64_t *near_first;   /* core blocks: for each target, near sources are those in [near_first, near_end) */
    const uint64_t *near_end;
};

/* Appends the payload of a block to `out`. Threads: touches nothing but its arguments. */
enum windrow_status windrow_block_encode(const struct windrow_block_input *input, struct windrow_buffer *out);

/* The flags of a payload that windrow_block_encode() has just made, WIDE included: for its record. */
uint32_t windrow_block_payload_flags(const uint8_t *payload);

/* Finds the parts of a payload, which is not trusted. WINDROW_DAMAGED when sizes contradict each other
 * or the record; then nothing in `block` may be used. Counts and gaps are not checked here: the sums of
 * counts are checked by windrow_block_lists() and by the sweep, each where it decodes them. */
enum windrow_status windrow_block_parse(const uint8_t *payload, size_t payload_bytes,
                                        const struct windrow_block_record *record, struct windrow_block *block);

/* Decodes a stream's numbers. `numbers` holds stream->count of them, plus 4 that may be overwritten.
 * Reads nothing outside the stream, whatever it holds; the caller must know that the block is not wide.
 * The first is the fastest path of this processor, the second its plain twin: same results. */
void windrow_stream_decode(const struct windrow_stream *stream, uint32_t *numbers);
void windrow_stream_decode_plain(const struct windrow_stream *stream, uint32_t *numbers);
/* The same for a wide block's stream. */
void windrow_stream_decode_wide(const struct windrow_stream *stream, uint64_t *numbers);

/* A block's lists in id order, for everyone but the sweep: plain, careful, not fast. */
struct windrow_lists {
    struct windrow_buffer sources; /* uint64_t, all lists one after another */
    struct windrow_buffer counts;  /* uint32_t, one a target */
    struct windrow_buffer scratch;
};

/* Decodes a block wholly. `core_pages` bounds the sources. WINDROW_DAMAGED unless it describes exactly
 * record->link_count links, ascending, in range. The buffers are reused from call to call. */
enum windrow_status windrow_block_lists(const struct windrow_block *block, const struct windrow_block_record *record,
                                        uint64_t core_pages, struct windrow_lists *lists);
void windrow_lists_free(struct windrow_lists *lists);

#endif
