#include "shard/job.h"

#include <stdlib.h>
#include <string.h>

struct outcome {
    double elapsed_seconds;
    uint64_t peak_memory_bytes;
    uint64_t dropped[WINDROW_DROP_COUNT];
};

enum windrow_status windrow_job_note(struct windrow_ledger *ledger, double elapsed_seconds, const uint64_t *dropped)
{
    struct outcome outcome = {.elapsed_seconds = elapsed_seconds, .peak_memory_bytes = windrow_memory_peak_bytes()};
    memcpy(outcome.dropped, dropped, sizeof outcome.dropped);
    struct windrow_ledger_record record = {"finished", &outcome, sizeof outcome};
    return windrow_ledger_commit(ledger, &record, 1);
}

enum windrow_status windrow_job_finished(struct windrow_ledger *ledger, bool *finished)
{
    struct outcome outcome;
    enum windrow_status status = windrow_ledger_get(ledger, "finished", &outcome, sizeof outcome);
    *finished = status == WINDROW_OK;
    return status == WINDROW_NO ? WINDROW_OK : status;
}

static enum windrow_status count_one(void *context, const char *key, const void *value, size_t bytes)
{
    (void)key;
    (void)value;
    (void)bytes;
    ++*(uint64_t *)context;
    return WINDROW_OK;
}

/* What a stage takes of a whole job, about: measured on a synthetic crawl of 20 million links, 2 threads. */
static const double weights[] = {[WINDROW_JOB_READING] = 0.72, [WINDROW_JOB_PAGES] = 0.06, [WINDROW_JOB_TABLE] = 0.09,
                                 [WINDROW_JOB_REMAP] = 0.05,   [WINDROW_JOB_LINKS] = 0.08, [WINDROW_JOB_FINISHED] = 0};

/* How far the job is, and how long it would take from here at the pace so far. */
static enum windrow_status estimate(struct windrow_ledger *ledger, struct windrow_job_status *job)
{
    static const char *const counts[] = {[WINDROW_JOB_PAGES] = "count/part", [WINDROW_JOB_TABLE] = "count/table",
                                         [WINDROW_JOB_REMAP] = "count/remap", [WINDROW_JOB_LINKS] = "count/links"};
    double seconds = 0, done = 0;
    uint64_t count = 0;
    enum windrow_status status = WINDROW_OK;
    job->share = job->seconds_left = -1;
    if (job->stage == WINDROW_JOB_READING) {
        if (job->reading.total_bytes)
            job->share = (double)job->reading.consumed_bytes / (double)job->reading.total_bytes;
    } else {
        status = windrow_ledger_get(ledger, counts[job->stage], &count, sizeof count);
        if (!status && count)
            job->share = (double)job->done_tasks / (double)count;
        if (!status)
            status = windrow_ledger_get(ledger, "seconds", &seconds, sizeof seconds);
    }
    if (status)
        return status == WINDROW_NO ? WINDROW_OK : status;
    for (int stage = 0; stage < (int)job->stage; stage++)
        done += weights[stage];
    if (job->share >= 0)
        done += weights[job->stage] * job->share;
    seconds += job->reading.seconds;
    if (job->share >= 0 && done > 0 && seconds > 0)
        job->seconds_left = seconds * (1 - done) / done;
    return WINDROW_OK;
}

enum windrow_status windrow_job_status(const char *store, struct windrow_job_status *out)
{
    static const char *const marks[] = {[WINDROW_JOB_PAGES] = "part/", [WINDROW_JOB_TABLE] = "table/", [WINDROW_JOB_REMAP] = "remap/",
                                        [WINDROW_JOB_LINKS] = "links/"};
    *out = (struct windrow_job_status){0};
    char *directory = windrow_path(store, "ledger"), *lock = windrow_path(store, "ledger/lock");
    struct windrow_ledger *ledger = NULL;
    enum windrow_status status = directory && lock ? windrow_ledger_open(directory, true, &ledger) : windrow_fail(WINDROW_RESOURCE, "out of memory");
    if (status)
        goto out;
    out->running = windrow_ledger_locked(lock);
    status = windrow_ledger_get(ledger, "reading", &out->reading, sizeof out->reading);
    if (status == WINDROW_NO)
        status = WINDROW_OK;
    struct windrow_alias_facts aliases;
    if (!status && !(status = windrow_ledger_get(ledger, "aliases", &aliases, sizeof aliases))) {
        out->aliases = aliases.count;
        out->alias_bad_lines = aliases.bad_lines;
        out->alias_cycles = aliases.cycles;
    } else if (status == WINDROW_NO) {
        status = WINDROW_OK;
    }
    for (int stage = WINDROW_JOB_PAGES; !status && stage <= WINDROW_JOB_LINKS; stage++) {
        uint64_t count = 0;
        status = windrow_ledger_each(ledger, marks[stage], count_one, &count);
        if (count) {
            out->stage = (enum windrow_job_stage)stage;
            out->done_tasks = count;
        }
    }
    struct outcome outcome;
    if (!status && !(status = windrow_ledger_get(ledger, "finished", &outcome, sizeof outcome))) {
        out->stage = WINDROW_JOB_FINISHED;
        out->elapsed_seconds = outcome.elapsed_seconds;
        out->peak_memory_bytes = outcome.peak_memory_bytes;
        memcpy(out->dropped, outcome.dropped, sizeof out->dropped);
        out->share = 1;
    } else if (status == WINDROW_NO) {
        status = estimate(ledger, out);
    }
out:
    windrow_ledger_close(ledger);
    free(directory);
    free(lock);
    return status;
}
