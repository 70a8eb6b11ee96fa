/* stream: the bytes of one dump file, decompressed.
 *
 * gzip (several members), zstd (several frames, skippable ones, windows up to 128 MiB), bzip2, xz and lz4 are read
 * through libarchive, with just these filters switched on; everything else is taken as plain text and read straight into
 * the caller's memory. A file that is cut short or damaged, or that goes on behind its compressed data with something
 * else, is WINDROW_INPUT, naming file and byte. (libarchive does not look at the checksum in a gzip trailer: damage in a
 * gzip file is noticed where it breaks the format. The other formats' checksums are looked at.)
 *
 * Threads: one stream by one thread.
 */
#ifndef WINDROW_DUMP_STREAM_H
#define WINDROW_DUMP_STREAM_H

#include "base/error.h"

#include <stdatomic.h>
#include <stddef.h>
#include <stdint.h>

struct windrow_stream;

/* Opens a file, or standard input for "-". `consumed`, the caller's, is increased by the bytes read from the file as it
 * lies on disk. WINDROW_INPUT when it cannot be opened, WINDROW_RESOURCE without memory; *stream is NULL then. */
enum windrow_status windrow_stream_open(const char *path, atomic_uint_fast64_t *consumed, struct windrow_stream **stream);

/* Reads up to `capacity` (at least 1) decompressed bytes; fewer than that does not mean the end, 0 bytes do. */
enum windrow_status windrow_stream_read(struct windrow_stream *stream, char *out, size_t capacity, size_t *bytes);

/* Closes the file (not standard input) and frees; NULL is fine. */
void windrow_stream_close(struct windrow_stream *stream);

#endif
