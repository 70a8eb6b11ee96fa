#include "rank/run.h"

#include "rank/record.h"
#include "sweep/tiles.h"
#include "rank/vector.h"

#include <dirent.h>
#include <errno.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include <xxhash.h>

struct windrow_run {
    struct windrow_run_facts facts;
    char *directory;
    uint64_t pages;
    struct windrow_ledger *ledger;
    struct windrow_map scores_map;
    const double *scores;
    struct windrow_order *order;
};

char *windrow_run_directory(const char *store_path, const char *name)
{
    return windrow_path(store_path, "runs/%s", name);
}

char *windrow_run_lock_path(const char *store_path, const char *name)
{
    return windrow_path(store_path, "runs/%s.lock", name);
}

enum windrow_status windrow_run_name_check(const char *name)
{
    static const char allowed[] = "ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789-_";
    if (!name)
        return WINDROW_OK;
    size_t bytes = strlen(name);
    if (bytes == 0 || bytes > WINDROW_RUN_NAME_MAX || strspn(name, allowed) != bytes)
        return windrow_fail(WINDROW_USAGE, "a run's name has 1 to %d letters, digits, - and _", WINDROW_RUN_NAME_MAX);
    return WINDROW_OK;
}

static enum windrow_status read_facts(struct windrow_run *run, struct windrow_certified_record *certified)
{
    struct windrow_settings_record settings;
    struct windrow_progress_record progress;
    struct windrow_run_facts *facts = &run->facts;
    enum windrow_status status = windrow_ledger_get(run->ledger, WINDROW_SETTINGS_KEY, &settings, sizeof settings);
    if (status)
        return status == WINDROW_NO ? windrow_fail(WINDROW_NO, "the run in %s has not begun", run->directory) : status;
    facts->method = (enum windrow_method)settings.method;
    facts->beta = settings.beta;
    facts->store_fingerprint = settings.fingerprint;
    facts->expected_error = facts->seconds_left = -1;
    status = windrow_ledger_get(run->ledger, WINDROW_PROGRESS_KEY, &progress, sizeof progress);
    if (status && status != WINDROW_NO)
        return status;
    if (!status) {
        facts->wanted_digits = progress.wanted_digits;
        facts->wanted_error = progress.wanted_error;
        facts->finished = progress.finished;
        facts->sweeps = progress.sweeps;
        facts->link_visits = progress.link_visits;
        facts->expected_error = progress.expected_error;
        facts->elapsed_seconds = progress.elapsed_seconds;
        facts->seconds_left = progress.seconds_left;
        facts->peak_memory_bytes = progress.peak_memory_bytes;
    }
    status = windrow_ledger_get(run->ledger, WINDROW_CERTIFIED_KEY, certified, sizeof *certified);
    if (status)
        return status == WINDROW_NO ? WINDROW_OK : status;
    facts->certified = true;
    facts->generation = certified->generation;
    facts->certificate = certified->certificate;
    return WINDROW_OK;
}

static enum windrow_status open_certified(struct windrow_run *run)
{
    char *scores = windrow_path(run->directory, "scores-%llu.f64", (unsigned long long)run->facts.generation);
    char *order = windrow_path(run->directory, "order-%llu", (unsigned long long)run->facts.generation);
    enum windrow_status status = WINDROW_OK;
    if (!scores || !order)
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while opening a run");
    if (!status)
        status = windrow_scores_open(scores, run->pages, run->facts.generation, &run->scores_map, &run->scores);
    if (!status)
        status = windrow_order_open(order, run->pages, &run->order);
    free(scores);
    free(order);
    return status;
}

static void close_certified(struct windrow_run *run)
{
    windrow_map_close(&run->scores_map);
    windrow_order_close(run->order);
    run->scores = NULL;
    run->order = NULL;
}

/* A working process may replace the certified generation between our reading its number and opening its
 * files; then there is a newer one, and we read the ledger again. */
static enum windrow_status open_newest(struct windrow_run *run)
{
    enum windrow_status status;
    for (uint64_t attempt = 0, before = 0;; attempt++) {
        struct windrow_certified_record certified;
        if ((status = read_facts(run, &certified)) || !run->facts.certified)
            return status;
        if (!(status = open_certified(run)))
            return WINDROW_OK;
        close_certified(run);
        if (attempt && run->facts.generation == before)
            return status;
        before = run->facts.generation;
    }
}

enum windrow_status windrow_run_open(const struct windrow_store *store, const char *name, struct windrow_run **out)
{
    *out = NULL;
    enum windrow_status status = windrow_run_name_check(name);
    if (status)
        return status;
    if (!name)
        name = "main";
    const char *path = windrow_store_path(store);
    struct windrow_run *run = calloc(1, sizeof *run);
    char *ledger = windrow_path(path, "runs/%s/ledger", name), *lock = windrow_run_lock_path(path, name);
    if (!run || !ledger || !lock || !(run->directory = windrow_run_directory(path, name))) {
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while opening a run");
        goto out;
    }
    run->scores_map.descriptor = -1;
    run->pages = windrow_store_facts(store)->pages;
    if ((status = windrow_ledger_open(ledger, true, &run->ledger))) {
        if (status == WINDROW_NO)
            windrow_fail(status, "%s has no run %s: not ranked yet; run `windrow rank`", path, name);
        goto out;
    }
    run->facts.working = windrow_ledger_locked(lock);
    if ((status = open_newest(run)))
        goto out;
    if (run->facts.store_fingerprint != windrow_store_facts(store)->fingerprint)
        status = windrow_fail(WINDROW_USAGE, "the run %s ranked another state of the store %s; rank again with --fresh", name, path);
out:
    free(ledger);
    free(lock);
    if (status)
        windrow_run_close(run);
    else
        *out = run;
    return status;
}

void windrow_run_close(struct windrow_run *run)
{
    if (!run)
        return;
    close_certified(run);
    windrow_ledger_close(run->ledger);
    free(run->directory);
    free(run);
}

const struct windrow_run_facts *windrow_run_facts(const struct windrow_run *run)
{
    return &run->facts;
}

const double *windrow_run_scores(const struct windrow_run *run)
{
    return run->scores;
}

const struct windrow_order *windrow_run_order(const struct windrow_run *run)
{
    return run->order;
}

void windrow_run_interval(const void *run, double score, double *low, double *high)
{
    const struct windrow_run *of = run;
    windrow_certificate_interval(&of->facts.certificate, score, low, high);
}

struct history {
    enum windrow_status (*each)(void *context, const struct windrow_run_sweep *sweep);
    void *context;
};

static enum windrow_status each_sweep(void *context, const char *key, const void *value, size_t bytes)
{
    const struct history *history = context;
    struct windrow_run_sweep sweep;
    if (bytes != sizeof sweep)
        return windrow_fail(WINDROW_DAMAGED, "the record %s of the run's ledger has a wrong size", key);
    memcpy(&sweep, value, sizeof sweep);
    return history->each(history->context, &sweep);
}

enum windrow_status windrow_run_history(const struct windrow_run *run,
                                        enum windrow_status (*each)(void *context, const struct windrow_run_sweep *sweep), void *context)
{
    struct history history = {each, context};
    return windrow_ledger_each(run->ledger, WINDROW_HISTORY_PREFIX, each_sweep, &history);
}

/* ---- Reading everything back --------------------------------------------------------------- */

struct verification {
    const char *name;
    void (*found)(void *context, const char *damage);
    void *context;
    bool any;
};

static void report(struct verification *verification)
{
    windrow_fail_within(WINDROW_DAMAGED, "run %s", verification->name);
    verification->found(verification->context, windrow_message());
    verification->any = true;
}

static void verify_scores(const struct windrow_run *run, struct verification *verification)
{
    double sum = 0, error = 0;
    uint64_t checksum;
    memcpy(&checksum, run->scores_map.data + 40, sizeof checksum);
    if (XXH3_64bits(run->scores, run->pages * sizeof *run->scores) != checksum) {
        windrow_fail(WINDROW_DAMAGED, "the scores do not have the checksum of their header");
        report(verification);
    }
    for (uint64_t page = 0; page < run->pages; page++) {
        double score = run->scores[page], next = sum + score;
        if (!(score >= 0 && score <= 1)) {
            windrow_fail(WINDROW_DAMAGED, "the score of page %llu is not between 0 and 1", (unsigned long long)page);
            report(verification);
            return;
        }
        error += sum >= score ? (sum - next) + score : (score - next) + sum;
        sum = next;
    }
    if (run->pages && fabs(sum + error - 1) > 1e-12) {
        windrow_fail(WINDROW_DAMAGED, "the scores add up to %.17g", sum + error);
        report(verification);
    }
    if (windrow_order_verify(run->order, run->scores))
        report(verification);
}

static void verify_checkpoint(const struct windrow_run *run, const char *key, struct verification *verification)
{
    struct windrow_checkpoint_record record;
    enum windrow_status status = windrow_ledger_get(run->ledger, key, &record, sizeof record);
    if (status == WINDROW_NO || (!status && !record.generation))
        return; /* there never was one, or it is no longer named */
    char *path = NULL;
    struct windrow_map map = {.descriptor = -1};
    if (!status && !(path = windrow_path(run->directory, "state-%llu", (unsigned long long)(record.generation % 2))))
        status = windrow_fail(WINDROW_RESOURCE, "out of memory");
    if (!status)
        status = windrow_map_open(&map, path);
    if (!status && (map.bytes != record.bytes || map.bytes < sizeof record.checksum ||
                    XXH3_64bits(map.data, map.bytes - sizeof record.checksum) != record.checksum ||
                    memcmp(map.data + map.bytes - sizeof record.checksum, &record.checksum, sizeof record.checksum)))
        status = windrow_fail(WINDROW_DAMAGED, "the checkpoint %s does not have the checksum that the ledger names", path);
    if (status)
        report(verification);
    windrow_map_close(&map);
    free(path);
}

static void verify_tiles(const struct windrow_store *store, const struct windrow_run *run, struct verification *verification)
{
    struct windrow_tiles_record record;
    struct windrow_tiles *tiles = NULL;
    struct windrow_web web;
    enum windrow_status status = windrow_ledger_get(run->ledger, WINDROW_TILES_KEY, &record, sizeof record);
    if (status == WINDROW_NO || (!status && !record.built))
        return; /* its vectors fit the memory, or the tiles are not needed now */
    windrow_web_of_store(store, &web);
    if (!status)
        status = windrow_tiles_open(&web, run->directory, windrow_store_facts(store)->fingerprint, record.checksum, &tiles);
    if (!status)
        status = windrow_tiles_read_back(tiles);
    if (status)
        report(verification);
    windrow_tiles_close(tiles);
}

static enum windrow_status ignore_sweep(void *context, const struct windrow_run_sweep *sweep)
{
    (void)context;
    (void)sweep;
    return WINDROW_OK;
}

enum windrow_status windrow_run_verify(const struct windrow_store *store, const char *name,
                                       void (*found)(void *context, const char *damage), void *context)
{
    struct verification verification = {name ? name : "main", found, context, false};
    struct windrow_run *run;
    enum windrow_status status = windrow_run_open(store, name, &run);
    if (status == WINDROW_DAMAGED || status == WINDROW_USAGE) {
        report(&verification);
        return WINDROW_NO;
    }
    if (status)
        return status == WINDROW_NO ? WINDROW_OK : status; /* nothing there yet, nothing damaged */
    if (run->facts.certified)
        verify_scores(run, &verification);
    /* A working process rewrites checkpoints; what it leaves is looked at when it is done. */
    if (!run->facts.working) {
        verify_checkpoint(run, WINDROW_CHECKPOINT_KEY, &verification);
        verify_checkpoint(run, WINDROW_CHECKPOINT_BEFORE_KEY, &verification);
        verify_tiles(store, run, &verification);
    }
    if (windrow_run_history(run, ignore_sweep, NULL))
        report(&verification);
    windrow_run_close(run);
    return verification.any ? WINDROW_NO : WINDROW_OK;
}

static int is_run(const struct dirent *entry)
{
    return entry->d_name[0] != '.' && windrow_run_name_check(entry->d_name) == WINDROW_OK;
}

enum windrow_status windrow_run_each(const struct windrow_store *store, enum windrow_status (*each)(void *context, const char *name), void *context)
{
    char *path = windrow_path(windrow_store_path(store), "runs");
    if (!path)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while listing runs");
    struct dirent **entries = NULL;
    int count = scandir(path, &entries, is_run, alphasort);
    enum windrow_status status = WINDROW_OK;
    if (count < 0 && errno != ENOENT)
        status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot list the runs in %s", path);
    for (int i = 0; i < count; i++) {
        if (!status)
            status = each(context, entries[i]->d_name);
        free(entries[i]);
    }
    free(entries);
    free(path);
    return status;
}
