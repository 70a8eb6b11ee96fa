/* pages: the page table, id <-> page key, in zstd frames of some 16,384 keys (layout: FORMAT.md).
 *
 * A frame holds the keys front-coded: what a key shares with the one before, how long the rest is, and
 * the rests, each kind together, which compresses better than mixing them. Each key may carry a number
 * (the alias table's target page); the page table's carry none. The index, kept apart, names for each
 * frame its first entry, where it stands, and its first key: so a page, or a key, is found by decoding
 * one frame.
 *
 * Threads: writers and frames belong to one thread; the index is read by all.
 */
#ifndef WINDROW_STORE_PAGES_H
#define WINDROW_STORE_PAGES_H

#include "base/file.h"

#include <zstd.h>

/* A frame is closed at so many keys, or before its keys would outgrow so many bytes: decoding one never takes much. */
#define WINDROW_PAGES_FRAME_KEYS 16384
#define WINDROW_PAGES_FRAME_BYTES (4u << 20)

/* One entry of the index, as the file page-index holds it (little-endian). The last entry of a table is a sentinel:
 * first_entry is the number of all entries, key_at the length of all first keys. */
struct windrow_pages_mark {
    uint64_t first_entry;
    uint64_t file_offset;  /* of the frame in its file: that of the entry's segment */
    uint64_t key_at;       /* where its first key begins in the file page-keys */
};

struct windrow_pages_writer {
    struct windrow_writer file;
    ZSTD_CCtx *compressor;
    uint64_t next_entry;
    uint32_t frame_keys;
    size_t frame_key_bytes;
    bool with_numbers;
    struct windrow_buffer shared, lengths, rests, numbers, frame, compressed;
    struct windrow_buffer marks;       /* struct windrow_pages_mark, key_at counting from 0 */
    struct windrow_buffer first_keys;
};

/* Begins a file of frames, whose first entry is number first_entry. */
enum windrow_status windrow_pages_writer_open(struct windrow_pages_writer *pages, const char *path, uint64_t first_entry, bool with_numbers);
/* Adds the next key, in order; `shared` of its bytes are those of the key before. */
enum windrow_status windrow_pages_put(struct windrow_pages_writer *pages, const uint8_t *key, size_t key_bytes, size_t shared, uint64_t number);
/* Closes and syncs; marks and first_keys stay readable until windrow_pages_writer_free(). */
enum windrow_status windrow_pages_writer_finish(struct windrow_pages_writer *pages, uint64_t *bytes, uint64_t *checksum);
void windrow_pages_writer_free(struct windrow_pages_writer *pages);

/* An index, mapped. */
struct windrow_pages_index {
    const struct windrow_pages_mark *marks; /* frame_count + 1 */
    uint64_t frame_count;
    const uint8_t *keys;
    uint64_t key_bytes;
};

/* Checks that the mapped bytes are an index of `entries` entries: ascending, in range. */
enum windrow_status windrow_pages_index_open(const struct windrow_map *marks, const struct windrow_map *keys, uint64_t entries,
                                             struct windrow_pages_index *index);
/* The frame that holds an entry, or that would hold a key. */
uint64_t windrow_pages_frame_of_entry(const struct windrow_pages_index *index, uint64_t entry);
uint64_t windrow_pages_frame_of_key(const struct windrow_pages_index *index, const uint8_t *key, size_t key_bytes);

/* A decoded frame. All zero at first; reused. */
struct windrow_pages_frame {
    uint64_t first_entry;
    uint32_t key_count;
    uint32_t *key_at;                  /* key_count + 1 places in `keys` */
    struct windrow_buffer keys;
    uint64_t *numbers;
    struct windrow_buffer compressed, raw;
    ZSTD_DCtx *decompressor;
};

/* Decodes frame number `frame`, which stands in the open file `descriptor`. WINDROW_DAMAGED unless it holds exactly the
 * keys that the index promises, ascending and well formed. */
enum windrow_status windrow_pages_frame_read(const struct windrow_pages_index *index, uint64_t frame, int descriptor, const char *path,
                                             bool with_numbers, struct windrow_pages_frame *out);
void windrow_pages_frame_free(struct windrow_pages_frame *frame);
/* Finds a key in a decoded frame; false when it is not there. */
bool windrow_pages_frame_find(const struct windrow_pages_frame *frame, const uint8_t *key, size_t key_bytes, uint32_t *position);

#endif
