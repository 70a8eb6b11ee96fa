/* reader: dump files, one after another, as chunks of whole lines.
 *
 * One thread reads (and decompresses); others walk through the chunks with dump/chunk.h. A chunk ends at a line's end. Only
 * a line longer than a chunk is handed out in pieces: a list (of ids, too) is split between two targets, its source repeated in front of each
 * further piece (chunk.continued); a pair is never split. Very long fields and lines are cut as dump/chunk.h says, so
 * that no input needs more memory than a chunk, about two fields, and the sample of a file's beginning.
 *
 * Each chunk carries the position of its end; a later reader of the same dumps goes on from there, after
 * it has checked that what comes before it, in that one file, is what the first reader saw. The end of a file is the
 * beginning of the next one, so that a finished file is not read again. Sizes of chunks
 * decide where the cuts are, never which lines, sources and targets come out.
 *
 * Errors: every message names the file. Threads: one reader by one thread, except windrow_dump_progress().
 */
#ifndef WINDROW_DUMP_READER_H
#define WINDROW_DUMP_READER_H

#include "base/error.h"
#include "dump/chunk.h"

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#define WINDROW_DUMP_CHUNK_BYTES ((size_t)1 << 20)

struct windrow_dump_options {
    const char *const *paths; /* "-" is standard input; must outlive the reader */
    size_t path_count;
    enum windrow_dump_shape shape; /* WINDROW_DUMP_AUTO recognises it for each file */
    bool with_ids;                 /* ids are welcome: the caller knows their names */
    size_t chunk_bytes;            /* 0: WINDROW_DUMP_CHUNK_BYTES */
};

struct windrow_dump;

/* Opens dumps for reading.
 *
 * resume   NULL to begin, or the end of the last chunk that was dealt with. Its file is read again up to
 *          there, files before it are not touched. WINDROW_INPUT when it is not the same stream.
 *
 * WINDROW_INPUT when a file cannot be opened; all are looked at, so that a misspelt name is known at once.
 * WINDROW_USAGE when standard input is named twice, no file is named, or the shape is ids and they are not welcome.
 * *dump is NULL on failure.
 */
enum windrow_status windrow_dump_open(const struct windrow_dump_options *options,
                                      const struct windrow_dump_position *resume, struct windrow_dump **dump);

/* Reads the next chunk, into memory that is used again or grown; chunk->bytes is 0 when there are no more.
 *
 * WINDROW_INPUT for damaged or unreadable files, WINDROW_USAGE for a file of ids that are not welcome, WINDROW_RESOURCE without
 * memory; the chunk then holds nothing, and the reader can only be closed.
 */
enum windrow_status windrow_dump_read(struct windrow_dump *dump, struct windrow_dump_chunk *chunk);

/* Bytes read so far of all files as they lie on disk (what a resume skipped without reading counts too), and their
 * sum, 0 when one of them is a pipe. Any thread may ask. */
void windrow_dump_progress(const struct windrow_dump *dump, uint64_t *consumed_bytes, uint64_t *total_bytes);

/* The name of a file for messages: its path, or "standard input". */
const char *windrow_dump_file_name(const struct windrow_dump *dump, uint64_t file);

/* Closes and frees; NULL is fine. */
void windrow_dump_close(struct windrow_dump *dump);

#endif
