/* sealed: scratch files that are not made of frames; their last 8 bytes are the XXH3-64 of all before.
 *
 * Writers open a windrow_writer with a checksum and call windrow_writer_seal() at the end, or replace a small file
 * whole. A file whose seal does not fit is WINDROW_DAMAGED: the job's scratch cannot be trusted then.
 */
#ifndef WINDROW_SHARD_SEALED_H
#define WINDROW_SHARD_SEALED_H

#include "base/file.h"

/* windrow_file_replace() with a seal. */
enum windrow_status windrow_sealed_replace(const char *path, const void *bytes, size_t count);
/* Loads a file whole into `out`, without its seal. */
enum windrow_status windrow_sealed_load(const char *path, struct windrow_buffer *out);
/* Reads a file through; *content_bytes receives its size without the seal. */
enum windrow_status windrow_sealed_check(const char *path, uint64_t *content_bytes);

#endif
