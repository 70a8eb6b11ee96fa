/* job: what others may know of a shard job: how far it is.
 *
 * Reads the ledger in STORE/ledger, also while another process works on the job.
 */
#ifndef WINDROW_SHARD_JOB_H
#define WINDROW_SHARD_JOB_H

#include "shard/reading.h"

enum windrow_job_stage { WINDROW_JOB_READING, WINDROW_JOB_PAGES, WINDROW_JOB_TABLE, WINDROW_JOB_REMAP, WINDROW_JOB_LINKS, WINDROW_JOB_FINISHED };

struct windrow_job_status {
    enum windrow_job_stage stage;
    bool running;                          /* some process works on it now */
    struct windrow_reading_state reading;
    uint64_t done_tasks;                   /* of the stage; 0 while reading */
    double share;                          /* of the stage, 0 to 1; negative: unknown */
    double seconds_left;                   /* of the whole job, were it going on; negative: unknown */
    uint64_t dropped[WINDROW_DROP_COUNT];  /* of the finished job: the links of its dumps that were left out, by reason */
    uint64_t aliases, alias_bad_lines, alias_cycles; /* of --aliases; 0 without */
    double elapsed_seconds;                /* of the finished job, its last process alone */
    uint64_t peak_memory_bytes;            /* likewise */
};

/* WINDROW_NO: nothing was ever sharded into `store`. */
enum windrow_status windrow_job_status(const char *store, struct windrow_job_status *status);

/* For the job itself: notes that it is through, what it took and what it dropped (WINDROW_DROP_COUNT counts); and whether
 * that is so. */
enum windrow_status windrow_job_note(struct windrow_ledger *ledger, double elapsed_seconds, const uint64_t *dropped);
enum windrow_status windrow_job_finished(struct windrow_ledger *ledger, bool *finished);

#endif
