/* keyrun: page keys in host order with what is known of each page, as a scratch file.
 *
 * A batch writes one, and so does each part of the page merge. An entry is
 *   varint  length of the prefix shared with the key before (0 at the beginning of a frame)
 *   varint  length of the rest, then the rest
 *   varint  out-degree × 2 + (1 if the page was crawled)
 * Beside the run stands its index, "<path>.index": of each frame its offset, the number of entries before
 * it, and its first key, so that a reader can begin in the middle.
 */
#ifndef WINDROW_SHARD_KEYRUN_H
#define WINDROW_SHARD_KEYRUN_H

#include "shard/frames.h"

struct windrow_keyrun_writer {
    struct windrow_frames_writer frames;
    struct windrow_buffer index;
    uint64_t entries;
    char *index_path;
};

enum windrow_status windrow_keyrun_writer_open(struct windrow_keyrun_writer *run, const char *path);
/* `shared` is exactly the length of the prefix that key and the key before share, which callers know anyway: the page merge
 * compares by it. */
enum windrow_status windrow_keyrun_put(struct windrow_keyrun_writer *run, const uint8_t *key, size_t key_bytes, size_t shared,
                                       uint64_t degree, bool crawled);
/* Syncs and closes run and index. */
enum windrow_status windrow_keyrun_writer_finish(struct windrow_keyrun_writer *run);
void windrow_keyrun_writer_abandon(struct windrow_keyrun_writer *run);

/* A run's index in memory. */
struct windrow_keyrun_mark {
    uint64_t offset;
    uint64_t first_entry;
    const uint8_t *key;
    size_t key_bytes;
};
struct windrow_keyrun_index {
    struct windrow_buffer bytes;
    struct windrow_keyrun_mark *marks;
    size_t mark_count;
};
enum windrow_status windrow_keyrun_index_load(const char *run_path, struct windrow_keyrun_index *index);
void windrow_keyrun_index_free(struct windrow_keyrun_index *index);

struct windrow_keyrun_reader {
    struct windrow_frames_reader frames;
    const uint8_t *at;
    struct windrow_buffer key;  /* of the current entry */
    size_t shared;              /* with the key of the entry before; 0 after a seek */
    uint64_t entry;             /* number of the current entry in the run */
    uint64_t next_entry;
    uint64_t degree;
    bool crawled;
    bool ended;                 /* there is no current entry */
};

enum windrow_status windrow_keyrun_reader_open(struct windrow_keyrun_reader *run, const char *path);
/* The next windrow_keyrun_next() gives the first entry of this frame. */
void windrow_keyrun_seek(struct windrow_keyrun_reader *run, const struct windrow_keyrun_mark *mark);
enum windrow_status windrow_keyrun_next(struct windrow_keyrun_reader *run);
void windrow_keyrun_reader_close(struct windrow_keyrun_reader *run);

/* The order of keys: memcmp, a prefix first. */
int windrow_keyrun_compare(const uint8_t *a, size_t a_bytes, const uint8_t *b, size_t b_bytes);
/* The length of the common prefix, at least `from` of which are known to be common. */
size_t windrow_keyrun_shared(const uint8_t *a, size_t a_bytes, const uint8_t *b, size_t b_bytes, size_t from);

#endif
