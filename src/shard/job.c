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
    } else if (status == WINDROW_NO) {
        status = WINDROW_OK;
    }
out:
    windrow_ledger_close(ledger);
    free(directory);
    free(lock);
    return status;
}
