/* sorter: puts any number of records in order, in bounded memory.
 *
 * Filling: windrow_sorter_put() as often as wanted. Emptying: windrow_sorter_next() until it ends. Records that
 * fit in memory never touch the disk. Otherwise memory is sorted and written out as a run each time it is
 * full. Where runs would outnumber what memory can read at a time, so many of them are merged into one of
 * the next level (three runs at a time, say: 1 2 3 -> A, 4 5 6 -> B, 7 8 9 -> C, A B C -> D): every record
 * is written once a level. The last merge goes straight to the caller.
 *
 * The runs are scratch that no ledger names: a job that was killed sorts again.
 * Threads: a sorter belongs to one thread.
 */
#ifndef WINDROW_SHARD_SORTER_H
#define WINDROW_SHARD_SORTER_H

#include "shard/records.h"

struct windrow_sorter;

/* A sorter whose runs are scratch/NAME-…; two at the same time have different names. It stays within memory_bytes as
 * far as a few buffers of 64 KiB and the longest record allow. */
enum windrow_status windrow_sorter_create(const char *scratch, const char *name, uint64_t memory_bytes, struct windrow_sorter **sorter);
/* Frees it and removes its runs; NULL is fine. */
void windrow_sorter_destroy(struct windrow_sorter *sorter);

enum windrow_status windrow_sorter_put(struct windrow_sorter *sorter, const struct windrow_record *record);
/* The next record in the order of windrow_record_compare(), valid until the next call; *ended when there are no more. */
enum windrow_status windrow_sorter_next(struct windrow_sorter *sorter, struct windrow_record *record, bool *ended);

#endif
