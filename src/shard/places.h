/* places: dumps read in part, as chunks of whole lines from places all over them.
 *
 * What can be read in part depends on the files:
 *   whole    everything, when asked for, or when it is no more than the budget
 *   places   plain files: windows chosen at random (and always the same ones) from all files together; of each the lines that
 *            begin in it, so that every line has the same chance, however long it is. Not at even distances: then a long
 *            stretch of one page's lines would never be met twice, and would pass for many pages
 *   prefix   when any file is compressed: the beginnings of all files, as much of each as its share of all bytes on disk. What
 *            it says of the rest is a guess
 * A pipe has no length: it can only be read whole, when asked for.
 *
 * Threads: one at a time.
 */
#ifndef WINDROW_SHARD_PLACES_H
#define WINDROW_SHARD_PLACES_H

#include "dump/reader.h"

/* A window of a plain file: small, for many places show a crawl better than few. */
#define WINDROW_PLACES_WINDOW_BYTES (UINT64_C(128) << 10)

struct windrow_places;

/* `dumps` are files or "-" for standard input; they must outlive the object. WINDROW_USAGE for a pipe without `full`, or for
 * dumps of ids; WINDROW_INPUT. */
enum windrow_status windrow_places_open(const char *const *dumps, size_t dump_count, enum windrow_shape shape, bool full, uint64_t budget_bytes,
                                        struct windrow_places **places);
void windrow_places_close(struct windrow_places *places); /* NULL is fine */

/* The next chunk; chunk->bytes is 0 when there are no more. *place counts from 1 (always 1 when all is read). */
enum windrow_status windrow_places_read(struct windrow_places *places, struct windrow_dump_chunk *chunk, uint32_t *place);

enum windrow_plan_basis windrow_places_basis(const struct windrow_places *places);
/* Places so far; 1 when all is read. */
uint32_t windrow_places_count(const struct windrow_places *places);
/* How much of what is to be read has been read, 0 to 1; negative when nobody can know. */
double windrow_places_progress(const struct windrow_places *places);
/* Which share of the dumps has been read: for the end. */
double windrow_places_share(const struct windrow_places *places);

#endif
