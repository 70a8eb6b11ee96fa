/* How a store and its run stand. */
#include "rank/run.h"
#include "shard/job.h"
#include "store/store.h"

const char *const windrow_state_names[WINDROW_STATES] = {"sharding", "sharded", "ranking", "stopped", "finished"};

static const char *const stage_names[] = {
    [WINDROW_JOB_READING] = "reading dumps",   [WINDROW_JOB_PAGES] = "merging pages", [WINDROW_JOB_TABLE] = "writing the page table",
    [WINDROW_JOB_REMAP] = "renumbering links", [WINDROW_JOB_LINKS] = "merging links", [WINDROW_JOB_FINISHED] = "finishing",
};

/* A store that is not whole: what is known of the job that makes it. */
static enum windrow_status read_sharding(const char *store, struct windrow_standing *standing)
{
    struct windrow_job_status job;
    enum windrow_status status = windrow_job_status(store, &job);
    if (status == WINDROW_NO)
        return windrow_fail(WINDROW_USAGE, "%s is no store, nor was one begun there; make one with windrow shard", store);
    if (status)
        return status;
    standing->state = job.running ? WINDROW_STATE_SHARDING : WINDROW_STATE_STOPPED;
    standing->stage = stage_names[job.stage];
    standing->stage_share = job.share;
    standing->seconds_left = job.seconds_left;
    return WINDROW_OK;
}

static double link_bits(const struct windrow_store *store)
{
    double bytes = 0;
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
        for (uint64_t block = 0; block < windrow_store_block_count(store, kind); block++)
            bytes += windrow_store_block_record(store, kind, block)->frame_bytes;
    uint64_t links = windrow_store_facts(store)->links;
    return links ? bytes * 8 / (double)links : 0;
}

static void read_facts(const struct windrow_store *store, struct windrow_standing *standing)
{
    const struct windrow_store_facts *facts = windrow_store_facts(store);
    standing->sharded = true;
    standing->state = WINDROW_STATE_SHARDED;
    standing->seconds_left = 0;
    standing->pages = facts->pages;
    standing->crawled_pages = facts->crawled_pages;
    standing->dangling_pages = facts->dangling_pages;
    standing->links = facts->links;
    standing->hosts = facts->hosts;
    standing->core_pages = facts->core_pages;
    standing->core_links = facts->core_links;
    standing->link_bits = link_bits(store);
}

static void read_run_facts(const struct windrow_run_facts *facts, struct windrow_standing *standing)
{
    standing->state = facts->working ? WINDROW_STATE_RANKING : facts->finished ? WINDROW_STATE_FINISHED : WINDROW_STATE_STOPPED;
    standing->begun = true;
    standing->sweeps = facts->sweeps;
    standing->link_visits = facts->link_visits;
    standing->elapsed_seconds = facts->elapsed_seconds;
    standing->seconds_left = standing->state == WINDROW_STATE_FINISHED ? 0 : facts->seconds_left;
    standing->peak_memory_bytes = facts->peak_memory_bytes;
    standing->certified = facts->certified;
    if (!facts->certified)
        return;
    standing->error_l1 = facts->certificate.error_l1;
    standing->alpha = facts->certificate.alpha;
    standing->rho = facts->certificate.rho;
    standing->digits = windrow_certificate_digits(&facts->certificate);
}

enum windrow_status windrow_standing_read(const char *path, const char *run_name, struct windrow_standing *standing)
{
    *standing = (struct windrow_standing){.seconds_left = -1, .stage_share = -1, .store_bytes = windrow_directory_bytes(path)};
    struct windrow_store *store = NULL;
    struct windrow_run *run = NULL;
    struct windrow_job_status job;
    enum windrow_status status = windrow_store_open(path, &store);
    if (status == WINDROW_NO)
        return read_sharding(path, standing);
    if (status)
        return status;
    read_facts(store, standing);
    if (!windrow_job_status(path, &job)) { /* a store can be whole without the ledger of the job that made it */
        standing->elapsed_seconds = job.elapsed_seconds;
        standing->peak_memory_bytes = job.peak_memory_bytes;
        for (int i = 0; i < WINDROW_DROP_COUNT; i++)
            standing->dropped[i] = job.dropped[i];
        standing->aliases = job.aliases;
        standing->alias_bad_lines = job.alias_bad_lines;
        standing->alias_cycles = job.alias_cycles;
    }
    status = windrow_run_open(store, run_name, &run);
    if (!status)
        read_run_facts(windrow_run_facts(run), standing);
    else if (status == WINDROW_NO && !run_name)
        status = WINDROW_OK; /* sharded, and not ranked yet */
    windrow_run_close(run);
    windrow_store_close(store);
    return status;
}
