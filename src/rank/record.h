/* record: what the ledger of a run holds. Written by the job (job.c), read by everyone (run.c).
 *
 *   settings               struct windrow_settings_record     once
 *   progress               struct windrow_progress_record     now and then
 *   certified              struct windrow_certified_record    when scores are handed out
 *   checkpoint             struct windrow_checkpoint_record   the newest
 *   checkpoint/before      the same, the one before
 *   tiles                  struct windrow_tiles_record        of a run whose vectors are larger than its memory
 *   history/NNNNNNNNNNNN   struct windrow_run_sweep           one a sweep
 *
 * Records are fixed structures of 8-byte fields in the machine's (little-endian) order.
 */
#ifndef WINDROW_RANK_RECORD_H
#define WINDROW_RANK_RECORD_H

#include "rank/run.h"
#include "store/ledger.h"

struct windrow_settings_record {
    uint64_t layout;        /* 1 */
    uint64_t method;
    double beta;
    uint64_t fingerprint;   /* of the store */
};

struct windrow_progress_record {
    double wanted_digits, wanted_error;
    uint64_t finished;
    uint64_t sweeps;
    uint64_t link_visits;
    double expected_error;
    double elapsed_seconds;
    double seconds_left;
    uint64_t peak_memory_bytes;
};

struct windrow_certified_record {
    uint64_t generation;
    uint64_t scores_checksum;  /* XXH3-64 of the scores */
    struct windrow_certificate certificate;
};

struct windrow_checkpoint_record {
    uint64_t generation;     /* the file is state-0 or state-1 by its parity */
    uint64_t checksum;       /* XXH3-64 of the file */
    uint64_t bytes;
    uint64_t certifications; /* passes over the core that proved, so far */
    double elapsed_seconds;
};

/* Stripes are fixed with the first checkpoint: another number would lead to other bytes. */
struct windrow_tiles_record {
    uint64_t wanted;         /* stripes that windrow_stripes_cut() was asked for; 0: vectors in memory */
    uint64_t built;          /* 1: the tiles are there */
    uint64_t checksum;       /* of their index */
};

#define WINDROW_TILES_KEY "tiles"
#define WINDROW_SETTINGS_KEY "settings"
#define WINDROW_PROGRESS_KEY "progress"
#define WINDROW_CERTIFIED_KEY "certified"
#define WINDROW_CHECKPOINT_KEY "checkpoint"
#define WINDROW_CHECKPOINT_BEFORE_KEY "checkpoint/before"
#define WINDROW_HISTORY_PREFIX "history/"

/* Paths of a run; the caller frees them. NULL when memory is out. */
char *windrow_run_directory(const char *store_path, const char *name);
char *windrow_run_lock_path(const char *store_path, const char *name);

#endif
