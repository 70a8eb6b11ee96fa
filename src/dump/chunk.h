/* chunk: a piece of a dump, and its lines, sources and targets.
 *
 * windrow_dump_read() (dump/reader.h) fills chunks; then any thread may walk through one:
 *
 *   struct windrow_dump_lines lines;
 *   struct windrow_dump_line line;
 *   struct windrow_dump_target target;
 *   windrow_dump_lines_begin(&lines, &chunk);
 *   while (windrow_dump_lines_next(&lines, &line)) {
 *       if (line.malformed != NULL) { ...count it; nothing else of the line is of use... continue; }
 *       ...line.source, unless line.continued already counted as a source...
 *       while (windrow_dump_line_target(&line, &target)) ...
 *   }
 *
 * Texts are spans of the chunk, with surrounding white space trimmed, not ended by a NUL, and may hold any
 * byte but TAB and newline (in a dump of ids no white space at all); they are not looked at any further: whether they are URLs or numbers, others say.
 * Ownership: a chunk owns its text. Threads: walking reads the chunk and writes only the caller's own structs, so that
 * different threads may walk through one chunk, or copies of a `lines` taken on the way.
 */
#ifndef WINDROW_DUMP_CHUNK_H
#define WINDROW_DUMP_CHUNK_H

#include "dump/shape.h"

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

/* A field of a list longer than this (before trimming) is cut to one byte more than this and not trimmed, so that it is
 * always too long for a URL; a line of pairs longer than this is malformed. These bound what a
 * file without any TAB or newline can take of memory, and do not depend on the size of chunks. */
#define WINDROW_DUMP_FIELD_BYTES_MAX ((size_t)128 << 10)
#define WINDROW_DUMP_PAIR_BYTES_MAX ((size_t)512 << 10)

/* A place in the dumps, in front of which everything has been handed out. */
struct windrow_dump_position {
    uint64_t file;  /* index among the paths */
    uint64_t bytes; /* of this file, decompressed */
    uint64_t line;  /* complete lines of this file */
    uint64_t hash;  /* XXH3-64 of those bytes */
};

/* All zero is an empty chunk, ready for windrow_dump_read(). */
struct windrow_dump_chunk {
    char *text;
    size_t bytes; /* 0: the dumps are at their end */
    size_t capacity_bytes;
    enum windrow_dump_shape shape; /* any but WINDROW_DUMP_AUTO */
    uint64_t file;
    uint64_t first_line; /* number of its first line in the file, from 1 */
    bool continued;      /* the first line goes on with a long line whose source is repeated */
    struct windrow_dump_position end;
};

void windrow_dump_chunk_free(struct windrow_dump_chunk *chunk);

struct windrow_dump_lines {
    const char *at;
    const char *end;
    enum windrow_dump_shape shape;
    uint64_t line; /* number of the line at `at` */
    bool continued;
};

struct windrow_dump_line {
    const char *source;
    size_t source_bytes; /* 0 for a line that starts with a TAB: no URL */
    uint64_t number;     /* in its file, from 1 */
    bool continued;      /* goes on with the targets of a line whose beginning was in an earlier chunk */
    const char *malformed; /* NULL, or what contradicts the shape: constant text for the log */
    const char *text;      /* the whole line without its newline, for the log */
    size_t text_bytes;

    /* for windrow_dump_line_target() */
    const char *rest;
    const char *rest_end;
    enum windrow_dump_shape shape;
    bool nofollow;
};

struct windrow_dump_target {
    const char *text;
    size_t bytes;
    bool nofollow;
};

/* Starts at the chunk's first line. */
void windrow_dump_lines_begin(struct windrow_dump_lines *lines, const struct windrow_dump_chunk *chunk);

/* The next line that is not blank; false at the end of the chunk. */
bool windrow_dump_lines_next(struct windrow_dump_lines *lines, struct windrow_dump_line *line);

/* The next target of a line; false when there are no more. Blank fields are left out. */
bool windrow_dump_line_target(struct windrow_dump_line *line, struct windrow_dump_target *target);

#endif
