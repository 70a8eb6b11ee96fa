/* records: keys with a value each, in key order, as a scratch file: tables of aliases and names, and the
 * runs of the sorter.
 *
 * An entry is
 *   varint  length of the prefix shared with the key before (0 at the beginning of a frame)
 *   varint  length of the rest, then the rest
 *   varint  length of the value, then the value
 *
 * Threads: different readers may read one file at the same time; an object belongs to one thread.
 */
#ifndef WINDROW_SHARD_RECORDS_H
#define WINDROW_SHARD_RECORDS_H

#include "shard/frames.h"

/* Longest key and longest value. */
#define WINDROW_RECORD_BYTES_MAX (1u << 18)

struct windrow_record {
    const uint8_t *key;
    size_t key_bytes;
    const uint8_t *value;
    size_t value_bytes;
};

/* The order of records: by key (memcmp, a prefix first), then likewise by value. */
int windrow_record_compare(const struct windrow_record *a, const struct windrow_record *b);

struct windrow_records_writer {
    struct windrow_frames_writer frames;
    struct windrow_buffer key; /* of the entry before */
    uint64_t count;
};

enum windrow_status windrow_records_writer_open(struct windrow_records_writer *records, const char *path);
/* Adds a record; keys come in order, equal ones are allowed. */
enum windrow_status windrow_records_put(struct windrow_records_writer *records, const struct windrow_record *record);
/* Closes the file, durable but for its name; or, for scratch that no ledger names, without a sync. */
enum windrow_status windrow_records_writer_finish(struct windrow_records_writer *records, bool durable);
void windrow_records_writer_abandon(struct windrow_records_writer *records);

struct windrow_records_reader {
    struct windrow_frames_reader frames;
    const uint8_t *at;
    struct windrow_buffer key;
    bool ended;
    struct windrow_record record; /* the current one; valid until the next step */
};

/* Opens a file in front of its first record. WINDROW_DAMAGED when there is none. */
enum windrow_status windrow_records_reader_open(struct windrow_records_reader *records, const char *path);
/* Steps to the next record; `ended` becomes true behind the last. */
enum windrow_status windrow_records_next(struct windrow_records_reader *records);
/* Steps on until the record's key is not before `key`, from a reader that stands on a record or behind the last;
 * *found tells whether it is that key. */
enum windrow_status windrow_records_seek(struct windrow_records_reader *records, const uint8_t *key, size_t key_bytes, bool *found);
void windrow_records_reader_close(struct windrow_records_reader *records);

#endif
