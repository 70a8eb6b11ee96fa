/* reading: the first stage of sharding, dumps to batches.
 *
 * Workers take turns at the reader: each takes a chunk of lines, brings URLs to page keys, and fills a
 * batch of its own. When one batch is full, all are written, each as a run, and the ledger learns of the
 * runs and of the place in the dumps that they reach. So a job that was killed goes on at most one batch
 * before where it was, and a batch is either in the ledger or will be read again.
 */
#ifndef WINDROW_SHARD_READING_H
#define WINDROW_SHARD_READING_H

#include "base/crew.h"
#include "base/meter.h"
#include "dump/reader.h"
#include "shard/fold.h"
#include "store/ledger.h"

/* What reading has come to so far; the ledger's record "reading". */
struct windrow_reading_state {
    struct windrow_dump_position position;
    uint64_t run_count;
    uint64_t lines;
    uint64_t fields;        /* URL fields looked at */
    uint64_t bad_fields;    /* malformed ones */
    uint64_t links;         /* kept, repeated ones across batches included */
    uint64_t run_pages;     /* of all runs together */
    uint64_t dropped[WINDROW_DROP_COUNT];
    uint64_t consumed_bytes; /* of the dumps as they lie on disk */
    uint64_t total_bytes;   /* 0: a pipe */
    double seconds;         /* that reading took, over all processes of the job */
    uint64_t samples;       /* lines in the log of malformed lines */
    uint64_t finished;      /* 1: all dumps are read */
    uint64_t hopeless;      /* 1: the share of malformed fields is above bad_max; never in the ledger */
};

struct windrow_reading {
    const struct windrow_shard_options *options;
    const struct windrow_fold *fold;    /* what pages are brought to; all zero: they stay as they are */
    const char *scratch;
    const char *log_path;               /* malformed lines, sampled */
    struct windrow_ledger *ledger;
    struct windrow_crew *crew;
    struct windrow_meter *meter;
    uint64_t memory_bytes;              /* for all batches together */
    uint64_t merge_memory_bytes;        /* for the merges that follow; 0: whatever they take */
};

/* Of each run the ledger's record "run/NNNNNN" holds its pages (uint64_t). */
/* Reads what is left of the dumps. WINDROW_INPUT also when the share of malformed fields is above bad_max. */
enum windrow_status windrow_reading_run(const struct windrow_reading *reading, struct windrow_reading_state *state);

#endif
