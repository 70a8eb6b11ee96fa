/* job: windrow_rank(), which drives a solver until what was asked for is proven, and keeps the run's ledger.
 *
 * Invariants (the ledger's own L1 to L3 come on top):
 *   J1  only files that the ledger does not name are written: checkpoint G goes to state-(G mod 2), whose
 *       generation before the last is no longer named; scores and order go under a new generation
 *   J2  a checkpoint is taken between two waves or two sweeps, so that going on from it gives the same bytes
 *   J3  whether to certify depends on the solver's state alone, which a checkpoint holds
 *   J4  tiles are named by the ledger when they are whole, and forgotten by it before they are removed; the vectors of a
 *       run with tiles lie in a file without a name, which nobody needs after a crash
 */
#include "rank/record.h"
#include "rank/solver.h"
#include "rank/vector.h"

#include <errno.h>
#include <fcntl.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

enum { LAYOUT = 1, HISTORY_PENDING = 64 };

/* Records are committed at least this often while sweeping, for those who watch. */
static const double progress_seconds = 1;
/* Besides vectors: blocks in flight, threads, libraries. */
static const uint64_t overhead_bytes = UINT64_C(48) << 20;

struct job {
    const struct windrow_rank_options *options;
    const char *name;
    double digits, error;   /* wanted; 0: not */
    struct windrow_store *store;
    struct windrow_web web;
    struct windrow_crew *crew;
    struct windrow_meter meter;
    struct windrow_solver *solver;
    struct windrow_ledger *ledger;
    char *directory, *lock_path;
    int lock;
    double began;                       /* this session */
    double elapsed_before;              /* sessions before */
    double last_checkpoint, last_commit, sweep_began, sweep_seconds;
    struct windrow_checkpoint_record checkpoint;   /* the newest; generation 0: none */
    struct windrow_certified_record certified;     /* generation 0: none */
    struct windrow_progress_record progress;
    struct windrow_run_sweep pending[HISTORY_PENDING];
    unsigned pending_count;
    struct windrow_tiles_record tiled;
    struct windrow_tiles *tiles;        /* NULL: vectors in memory */
    int scratch;                        /* the vectors' file, with tiles */
    bool saved;                         /* the newest checkpoint holds the solver's state */
};

void windrow_rank_defaults(struct windrow_rank_options *options)
{
    *options = (struct windrow_rank_options){
        .run = "main",
        .method = WINDROW_METHOD_MIXED,
        .beta = 0.85,
        .digits = 6,
        .memory_bytes = windrow_memory_machine_bytes() / 4 * 3,
        .threads = windrow_crew_default_workers(),
        .checkpoint_seconds = 300,
    };
}

/* ---- The ledger ---------------------------------------------------------------------------- */

static double elapsed(const struct job *job)
{
    return job->elapsed_before + (windrow_seconds() - job->began);
}

/* Seconds until what is wanted is proven, from how the error has been falling; negative: unknown. */
static double seconds_left(const struct job *job)
{
    const struct windrow_solver_state *state = &job->solver->state;
    uint64_t span = state->change_count > 5 ? 5 : state->change_count > 0 ? state->change_count - 1 : 0;
    if (span == 0 || job->sweep_seconds <= 0)
        return -1;
    double fall = log(state->changes[state->change_count - 1] / state->changes[state->change_count - 1 - span]) / (double)span;
    double missing = 0;
    if (job->error > 0)
        missing = fmax(missing, log(windrow_solver_expected_error(job->solver) / job->error));
    if (job->digits > 0)
        missing = fmax(missing, log(windrow_solver_expected_rho(job->solver)) + job->digits * log(10));
    if (!(fall < 0) || !isfinite(missing))
        return -1;
    return (ceil(missing / -fall) + 2) * job->sweep_seconds;
}

static void fill_progress(struct job *job)
{
    const struct windrow_solver_state *state = &job->solver->state;
    job->progress.wanted_digits = job->digits;
    job->progress.wanted_error = job->error;
    job->progress.sweeps = state->sweeps + state->certifications;
    job->progress.link_visits = state->link_visits;
    job->progress.expected_error = windrow_solver_expected_error(job->solver);
    job->progress.elapsed_seconds = elapsed(job);
    job->progress.seconds_left = job->progress.finished ? 0 : seconds_left(job);
    uint64_t peak = windrow_memory_peak_bytes();
    if (peak > job->progress.peak_memory_bytes)
        job->progress.peak_memory_bytes = peak;
}

/* Commits the progress and the sweeps not yet told, together with what else is given. */
static enum windrow_status commit(struct job *job, const struct windrow_ledger_record *more, size_t more_count)
{
    struct windrow_ledger_record records[HISTORY_PENDING + 8];
    char keys[HISTORY_PENDING][32];
    size_t count = 0;
    fill_progress(job);
    records[count++] = (struct windrow_ledger_record){WINDROW_PROGRESS_KEY, &job->progress, sizeof job->progress};
    for (unsigned i = 0; i < job->pending_count; i++) {
        snprintf(keys[i], sizeof keys[i], WINDROW_HISTORY_PREFIX "%012llu", (unsigned long long)job->pending[i].sweep);
        records[count++] = (struct windrow_ledger_record){keys[i], &job->pending[i], sizeof job->pending[i]};
    }
    for (size_t i = 0; i < more_count; i++)
        records[count++] = more[i];
    enum windrow_status status = windrow_ledger_commit(job->ledger, records, count);
    if (!status) {
        job->pending_count = 0;
        job->last_commit = windrow_seconds();
    }
    return status;
}

static enum windrow_status save_checkpoint(struct job *job)
{
    struct windrow_checkpoint_record next = {.generation = job->checkpoint.generation + 1, .elapsed_seconds = elapsed(job)};
    char *path = windrow_path(job->directory, "state-%llu", (unsigned long long)(next.generation % 2));
    if (!path)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while saving a checkpoint");
    enum windrow_status status = WINDROW_OK;
    struct windrow_checkpoint_record none = {0};
    /* J1: what the ledger still calls the one before is about to be overwritten. */
    if (job->checkpoint.generation) {
        struct windrow_ledger_record forget = {WINDROW_CHECKPOINT_BEFORE_KEY, &none, sizeof none};
        status = windrow_ledger_commit(job->ledger, &forget, 1);
    }
    if (!status)
        status = windrow_state_write(job->directory, path, job->solver, windrow_store_facts(job->store)->fingerprint, next.generation,
                                     &next.bytes, &next.checksum);
    if (!status) {
        const struct windrow_ledger_record records[] = {
            {WINDROW_CHECKPOINT_KEY, &next, sizeof next},
            {WINDROW_CHECKPOINT_BEFORE_KEY, &job->checkpoint, sizeof job->checkpoint},
        };
        status = commit(job, records, 2);
    }
    if (!status) {
        job->checkpoint = next;
        job->last_checkpoint = windrow_seconds();
        job->saved = true;
    }
    free(path);
    return status;
}

static enum windrow_status stop(struct job *job)
{
    enum windrow_status status = job->saved ? WINDROW_OK : save_checkpoint(job);
    if (status)
        return status;
    return windrow_fail(WINDROW_STOPPED, "stopped at a checkpoint after %llu sweeps; run the same command again to go on",
                        (unsigned long long)job->solver->state.sweeps);
}

/* Between two waves or sweeps. */
static enum windrow_status pause_job(void *context)
{
    struct job *job = context;
    job->saved = false;
    if (windrow_meter_stopping(&job->meter))
        return stop(job);
    if (windrow_seconds() - job->last_checkpoint >= job->options->checkpoint_seconds)
        return save_checkpoint(job);
    return WINDROW_OK;
}

/* ---- Beginning ----------------------------------------------------------------------------- */

static enum windrow_status check_options(const struct windrow_rank_options *options)
{
    if (!options->store)
        return windrow_fail(WINDROW_USAGE, "no store is named");
    if (!(options->beta > 0 && options->beta < 1))
        return windrow_fail(WINDROW_USAGE, "beta must be above 0 and below 1");
    if (!(options->digits >= 0 && options->digits <= 15) || !(options->error >= 0))
        return windrow_fail(WINDROW_USAGE, "digits must be 0 to 15, an error not negative");
    if (options->method != WINDROW_METHOD_MIXED && options->method != WINDROW_METHOD_POWER)
        return windrow_fail(WINDROW_USAGE, "there is no such method");
    return windrow_run_name_check(options->run);
}

static enum windrow_status compare_settings(const struct job *job, const struct windrow_settings_record *old, const struct windrow_settings_record *now)
{
    const char *what = NULL;
    if (old->fingerprint != now->fingerprint)
        what = "ranked another state of this store";
    else if (old->beta != now->beta)
        what = "has another beta";
    else if (old->method != now->method)
        what = "uses another method";
    else if (old->layout != now->layout)
        return windrow_fail(WINDROW_USAGE, "the run %s was written by another version; use --fresh to begin it anew", job->name);
    if (!what)
        return WINDROW_OK;
    return windrow_fail(WINDROW_USAGE, "the run %s %s (beta %.17g, method %s); use --fresh to begin it anew, or --run NAME for another run",
                        job->name, what, old->beta, old->method == WINDROW_METHOD_POWER ? "power" : "mixed");
}

static enum windrow_status open_directory(struct job *job)
{
    const char *path = job->options->store;
    char *runs = windrow_path(path, "runs"), *ledger = NULL;
    enum windrow_status status = WINDROW_OK;
    job->directory = windrow_run_directory(path, job->name);
    job->lock_path = windrow_run_lock_path(path, job->name);
    if (!runs || !job->directory || !job->lock_path || !(ledger = windrow_path(job->directory, "ledger"))) {
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while opening a run");
        goto out;
    }
    if ((status = windrow_directory_make(runs)))
        goto out;
    if ((status = windrow_ledger_lock(job->lock_path, &job->lock)))
        goto out;
    if (job->options->fresh && (status = windrow_directory_remove(job->directory)))
        goto out;
    if ((status = windrow_directory_make(job->directory)))
        goto out;
    if ((status = windrow_ledger_open(ledger, false, &job->ledger)))
        goto out;
    if ((status = windrow_directory_sync(job->directory)))
        goto out;
    if ((status = windrow_directory_sync(runs)))
        goto out;
    status = windrow_directory_sync(path);
out:
    free(runs);
    free(ledger);
    return status;
}

static enum windrow_status get_or_none(struct job *job, const char *key, void *value, size_t bytes)
{
    enum windrow_status status = windrow_ledger_get(job->ledger, key, value, bytes);
    if (status == WINDROW_NO)
        memset(value, 0, bytes);
    return status == WINDROW_NO ? WINDROW_OK : status;
}

static enum windrow_status read_ledger(struct job *job)
{
    struct windrow_settings_record old, now = {
        .layout = LAYOUT,
        .method = job->options->method,
        .beta = job->options->beta,
        .fingerprint = windrow_store_facts(job->store)->fingerprint,
    };
    enum windrow_status status = windrow_ledger_get(job->ledger, WINDROW_SETTINGS_KEY, &old, sizeof old);
    if (status == WINDROW_NO) {
        const struct windrow_ledger_record record = {WINDROW_SETTINGS_KEY, &now, sizeof now};
        return windrow_ledger_commit(job->ledger, &record, 1);
    }
    if (status)
        return status;
    if ((status = compare_settings(job, &old, &now)))
        return status;
    if ((status = get_or_none(job, WINDROW_CHECKPOINT_KEY, &job->checkpoint, sizeof job->checkpoint)))
        return status;
    if ((status = get_or_none(job, WINDROW_CERTIFIED_KEY, &job->certified, sizeof job->certified)))
        return status;
    return get_or_none(job, WINDROW_PROGRESS_KEY, &job->progress, sizeof job->progress);
}

static bool proves(const struct job *job, const struct windrow_certificate *certificate)
{
    return (job->error == 0 || certificate->error_l1 <= job->error) &&
           (job->digits == 0 || windrow_certificate_digits(certificate) >= job->digits);
}

/* A new file for the vectors; without a name nothing is left behind, however this process ends. */
static enum windrow_status open_scratch(struct job *job)
{
    char *path = windrow_path(job->directory, "vectors");
    if (!path)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while beginning to rank");
    enum windrow_status status = WINDROW_OK;
    if (job->scratch >= 0)
        windrow_files.close(job->scratch);
    job->scratch = windrow_files.open(path, O_RDWR | O_CREAT | O_TRUNC, 0666);
    if (job->scratch < 0)
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot create %s", path);
    else if (windrow_files.unlink(path))
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot remove %s", path);
    free(path);
    return status;
}

static enum windrow_status make_solver(struct job *job)
{
    windrow_solver_destroy(job->solver);
    job->solver = NULL;
    enum windrow_status status = job->tiles ? open_scratch(job) : WINDROW_OK;
    if (status)
        return status;
    const struct windrow_solver_options options = {
        .web = &job->web,
        .crew = job->crew,
        .method = job->options->method,
        .beta = job->options->beta,
        .tiles = job->tiles,
        .scratch = job->scratch,
        .meter = &job->meter,
        .pause = pause_job,
        .pause_context = job,
    };
    return windrow_solver_create(&options, &job->solver);
}

static enum windrow_status load_checkpoint(struct job *job, const struct windrow_checkpoint_record *record)
{
    char *path = windrow_path(job->directory, "state-%llu", (unsigned long long)(record->generation % 2));
    if (!path)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while loading a checkpoint");
    enum windrow_status status = windrow_state_read(path, job->solver, windrow_store_facts(job->store)->fingerprint, record->generation,
                                                    record->bytes, record->checksum);
    free(path);
    return status;
}

/* Goes on from the newest checkpoint that is sound, or from the beginning: either way to the same result. */
static enum windrow_status resume(struct job *job)
{
    struct windrow_checkpoint_record before;
    enum windrow_status status = make_solver(job);
    if (status || job->checkpoint.generation == 0)
        return status;
    job->elapsed_before = fmax(job->checkpoint.elapsed_seconds, job->progress.elapsed_seconds);
    status = load_checkpoint(job, &job->checkpoint);
    if (status == WINDROW_DAMAGED) {
        if ((status = get_or_none(job, WINDROW_CHECKPOINT_BEFORE_KEY, &before, sizeof before)))
            return status;
        status = before.generation ? load_checkpoint(job, &before) : WINDROW_DAMAGED;
        /* A failed load leaves half a vector. */
        if (status == WINDROW_DAMAGED)
            return make_solver(job);
    }
    job->saved = !status;
    return status;
}

static uint64_t needed_bytes(const struct job *job)
{
    uint64_t degrees = job->web.core_pages * 2 * sizeof(uint32_t);
    uint64_t blocks = (job->web.block_count[WINDROW_BLOCK_CORE] + job->web.block_count[WINDROW_BLOCK_RIM]) * sizeof(struct windrow_block_record);
    uint64_t power = job->options->method == WINDROW_METHOD_POWER ? job->web.pages * sizeof(double) : 0;
    return windrow_solver_memory_bytes(&job->web) + degrees + blocks + power + overhead_bytes;
}

/* ---- Memory -------------------------------------------------------------------------------- */

/* What a store keeps in memory while it is ranked, without the degrees: hosts, core map, block records. */
static uint64_t store_bytes(const struct job *job)
{
    return job->web.host_count * 40 + job->web.pages / 3 +
           (job->web.block_count[WINDROW_BLOCK_CORE] + job->web.block_count[WINDROW_BLOCK_RIM]) * sizeof(struct windrow_block_record);
}

/* With tiles. What does not grow with the crawl, overhead_bytes, comes on top of --memory then. */
static uint64_t tiled_bytes(const struct job *job, unsigned wanted)
{
    struct windrow_stripes stripes;
    windrow_stripes_cut(&job->web, wanted, &stripes);
    return windrow_solver_stripe_bytes(&job->web, &stripes) + windrow_tiles_memory_bytes(&job->web, stripes.count) + store_bytes(job);
}

static enum windrow_status refuse_memory(const struct job *job, uint64_t needed, const char *advice)
{
    return windrow_fail(WINDROW_RESOURCE, "ranking %llu pages takes %llu MiB of memory%s and the budget is %llu MiB; give more by --memory %lluM%s",
                        (unsigned long long)job->web.pages, (unsigned long long)((needed >> 20) + 1), *advice ? " the way it was begun" : "",
                        (unsigned long long)(job->options->memory_bytes >> 20), (unsigned long long)((needed >> 20) + 1), advice);
}

/* As few stripes as will do; none where the vectors fit. */
static enum windrow_status choose_stripes(struct job *job)
{
    uint64_t least = UINT64_MAX, needed = needed_bytes(job), memory = job->options->memory_bytes;
    job->tiled = (struct windrow_tiles_record){0};
    if (needed <= memory)
        return WINDROW_OK;
    if (job->options->method == WINDROW_METHOD_POWER)
        return refuse_memory(job, needed, "");
    for (unsigned wanted = 2; wanted <= WINDROW_STRIPES_MOST; wanted++) {
        uint64_t bytes = tiled_bytes(job, wanted);
        least = bytes < least ? bytes : least;
        if (bytes <= memory) {
            job->tiled.wanted = wanted;
            return WINDROW_OK;
        }
    }
    return refuse_memory(job, least, "");
}

static enum windrow_status commit_tiles(struct job *job)
{
    const struct windrow_ledger_record record = {WINDROW_TILES_KEY, &job->tiled, sizeof job->tiled};
    return windrow_ledger_commit(job->ledger, &record, 1);
}

static enum windrow_status forget_tiles(struct job *job)
{
    job->tiled.built = 0;
    enum windrow_status status = commit_tiles(job);
    return status ? status : windrow_tiles_remove(job->directory);
}

static enum windrow_status build_tiles(struct job *job)
{
    struct windrow_stripes stripes;
    enum windrow_status status = forget_tiles(job);
    if (status)
        return status;
    windrow_stripes_cut(&job->web, (unsigned)job->tiled.wanted, &stripes);
    windrow_meter_stage(&job->meter, "cutting links into tiles", "links", job->web.links[WINDROW_BLOCK_CORE] + job->web.links[WINDROW_BLOCK_RIM]);
    status = windrow_tiles_build(&job->web, job->crew, &stripes, job->directory, windrow_store_facts(job->store)->fingerprint,
                                 &job->tiled.checksum, &job->meter);
    windrow_meter_stage_end(&job->meter);
    if (status) {
        windrow_tiles_remove(job->directory);
        return status;
    }
    job->tiled.built = 1;
    return commit_tiles(job);
}

static enum windrow_status open_tiles(struct job *job)
{
    return windrow_tiles_open(&job->web, job->directory, windrow_store_facts(job->store)->fingerprint, job->tiled.checksum, &job->tiles);
}

/* Finds out whether the vectors fit the memory, and readies the tiles where they do not. */
static enum windrow_status prepare_memory(struct job *job)
{
    enum windrow_status status = get_or_none(job, WINDROW_TILES_KEY, &job->tiled, sizeof job->tiled);
    if (status)
        return status;
    if (job->tiled.wanted > WINDROW_STRIPES_MOST)
        return windrow_fail(WINDROW_DAMAGED, "the ledger of the run %s tells of %llu stripes; rank again with --fresh", job->name,
                            (unsigned long long)job->tiled.wanted);
    if (job->checkpoint.generation) {
        uint64_t needed = job->tiled.wanted ? tiled_bytes(job, (unsigned)job->tiled.wanted) : needed_bytes(job);
        if (needed > job->options->memory_bytes)
            return refuse_memory(job, needed, ", or begin it anew within this budget by --fresh");
    } else {
        struct windrow_tiles_record before = job->tiled;
        if ((status = choose_stripes(job)))
            return status;
        if (job->tiled.wanted == before.wanted)
            job->tiled = before;
        else if ((status = forget_tiles(job)))
            return status;
    }
    if (!job->tiled.wanted)
        return WINDROW_OK;
    if (job->tiled.built && (status = open_tiles(job)) != WINDROW_DAMAGED)
        return status;
    status = build_tiles(job);
    return status ? status : open_tiles(job);
}

/* ---- Sweeping ------------------------------------------------------------------------------ */

static bool ready_to_certify(const struct job *job)
{
    double error = windrow_solver_expected_error(job->solver), rho = windrow_solver_expected_rho(job->solver);
    if (error < 0)
        return false;
    return (job->error == 0 || error <= job->error) && (job->digits == 0 || rho <= pow(10, -job->digits));
}

static enum windrow_status sweep_once(struct job *job)
{
    struct windrow_solver_state *state = &job->solver->state;
    uint64_t links = job->web.links[WINDROW_BLOCK_CORE];
    if (job->options->method == WINDROW_METHOD_POWER)
        links += job->web.links[WINDROW_BLOCK_RIM];
    windrow_meter_stage(&job->meter, "sweeping", "links", links);
    job->meter.now.sweep = state->sweeps + 1;
    job->meter.now.error_l1 = windrow_solver_expected_error(job->solver);
    job->meter.now.seconds_left = seconds_left(job);
    job->sweep_began = windrow_seconds();
    enum windrow_status status = windrow_solver_sweep(job->solver);
    windrow_meter_stage_end(&job->meter);
    if (status)
        return status;
    job->saved = false;
    job->sweep_seconds = windrow_seconds() - job->sweep_began;
    job->pending[job->pending_count++] = (struct windrow_run_sweep){
        .sweep = state->sweeps,
        .change = state->changes[state->change_count - 1],
        .expected_error = windrow_solver_expected_error(job->solver),
        .link_visits = state->link_visits,
        .elapsed_seconds = elapsed(job),
    };
    if (job->pending_count == HISTORY_PENDING || windrow_seconds() - job->last_commit >= progress_seconds)
        status = commit(job, NULL, 0);
    return status ? status : pause_job(job);
}

/* True when more sweeps cannot prove more: what is missing is below the rounding of double precision, or
 * certificates have stopped to improve near it. */
static bool exhausted(const struct job *job, const struct windrow_certificate *now, const struct windrow_certificate *before)
{
    bool hopeless = (job->error > 0 && now->rounding_l1 >= job->error) || (job->digits > 0 && now->rounding_rho >= pow(10, -job->digits));
    bool resting = before->error_l1 > 0 && now->error_l1 > 0.7 * before->error_l1 && !(now->rho < 0.7 * before->rho);
    return hopeless ? resting || now->error_l1 < 2 * now->rounding_l1 : resting && now->error_l1 < 100 * now->rounding_l1;
}

/* With `anyway` scores are made even where the core shows that they will not be good enough. */
static enum windrow_status certify(struct job *job, struct windrow_certificate *certificate, bool anyway)
{
    bool complete;
    windrow_meter_stage(&job->meter, "certifying", "links", job->web.links[WINDROW_BLOCK_CORE] + job->web.links[WINDROW_BLOCK_RIM]);
    job->meter.now.sweep = job->solver->state.sweeps;
    job->meter.now.error_l1 = windrow_solver_expected_error(job->solver);
    enum windrow_status status = windrow_solver_certify(job->solver, anyway ? 0 : job->error, anyway || job->digits == 0 ? 0 : pow(10, -job->digits),
                                                       certificate, &complete);
    windrow_meter_stage_end(&job->meter);
    return status == WINDROW_STOPPED ? stop(job) : status;
}

/* True when sweeps change nothing any more but the last bits of the scores. */
static bool at_rest(const struct job *job)
{
    const struct windrow_solver_state *state = &job->solver->state;
    enum { LOOK_BACK = 10 };
    if (state->change_count == 0)
        return false;
    double now = state->changes[state->change_count - 1];
    return now == 0 || (state->change_count > LOOK_BACK && now < 1e-13 * (1 - job->options->beta) &&
                        now > 0.5 * state->changes[state->change_count - 1 - LOOK_BACK]);
}

/* Sweeps until the certificate proves what is wanted, or the most that can be proven (*enough is false then). */
static enum windrow_status solve(struct job *job, struct windrow_certificate *certificate, bool *enough)
{
    struct windrow_certificate before = {0};
    enum windrow_status status = WINDROW_OK;
    for (;;) {
        bool rest = at_rest(job);
        if (job->solver->state.next_block == 0 && (rest || ready_to_certify(job))) {
            if ((status = certify(job, certificate, rest)))
                return status;
            job->saved = false;
            *enough = proves(job, certificate);
            if (*enough || rest)
                return WINDROW_OK;
            if (exhausted(job, certificate, &before))
                return certify(job, certificate, true);
            before = *certificate;
        }
        if ((status = sweep_once(job)))
            return status;
    }
}

/* ---- Handing out --------------------------------------------------------------------------- */

/* Ordering is no faster with more, and what it takes stands beside the vectors. */
#define ORDER_MEMORY_MOST (UINT64_C(256) << 20)

static void forget_generation(const struct job *job, uint64_t generation)
{
    char *scores = windrow_path(job->directory, "scores-%llu.f64", (unsigned long long)generation);
    char *order = windrow_path(job->directory, "order-%llu", (unsigned long long)generation);
    if (scores)
        windrow_file_remove(scores);
    if (order)
        windrow_file_remove(order);
    free(scores);
    free(order);
}

static enum windrow_status publish(struct job *job, const struct windrow_certificate *certificate, bool enough)
{
    struct windrow_certified_record next = {.generation = job->certified.generation + 1, .certificate = *certificate};
    char *scores = windrow_path(job->directory, "scores-%llu.f64", (unsigned long long)next.generation);
    char *order = windrow_path(job->directory, "order-%llu", (unsigned long long)next.generation);
    uint64_t pages = job->web.pages;
    enum windrow_status status = WINDROW_OK;
    if (!scores || !order) {
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while writing scores");
        goto out;
    }
    if ((status = windrow_scores_write(job->directory, scores, job->solver, job->store, next.generation, &next.scores_checksum)))
        goto out;
    /* More digits may be asked for later: the run goes on from here then. */
    if ((status = save_checkpoint(job)))
        goto out;
    windrow_meter_stage(&job->meter, "ordering", "pages", 2 * pages);
    uint64_t kept = job->tiles ? store_bytes(job) + job->web.core_pages / job->tiles->stripes.count * sizeof(double) : needed_bytes(job);
    uint64_t memory = job->options->memory_bytes > kept ? job->options->memory_bytes - kept : 0;
    if (memory > ORDER_MEMORY_MOST)
        memory = ORDER_MEMORY_MOST;
    status = windrow_order_build(scores, WINDROW_SCORES_OFFSET, pages, memory > WINDROW_ORDER_MEMORY_LEAST ? memory : WINDROW_ORDER_MEMORY_LEAST,
                                 job->options->threads, order, &job->meter);
    windrow_meter_stage_end(&job->meter);
    if (status == WINDROW_STOPPED)
        status = stop(job);
    if (status)
        goto out;
    job->progress.finished = enough;
    const struct windrow_ledger_record record = {WINDROW_CERTIFIED_KEY, &next, sizeof next};
    if ((status = commit(job, &record, 1)))
        goto out;
    if (job->certified.generation)
        forget_generation(job, job->certified.generation);
    job->certified = next;
    /* The same tiles can be made again, should more digits be asked for. */
    if (job->tiles)
        status = forget_tiles(job);
out:
    free(scores);
    free(order);
    return status;
}

static enum windrow_status run_job(struct job *job, bool *already_done)
{
    const struct windrow_rank_options *options = job->options;
    enum windrow_status status;
    if ((status = windrow_store_open(options->store, &job->store)))
        return status == WINDROW_NO ? windrow_fail_within(WINDROW_INPUT, "the store is not finished, so that it cannot be ranked yet") : status;
    if ((status = open_directory(job)))
        return status;
    if ((status = read_ledger(job)))
        return status;
    if (job->certified.generation > 1)
        forget_generation(job, job->certified.generation - 1);
    if (job->certified.generation && proves(job, &job->certified.certificate)) {
        *already_done = true;
        if (job->progress.finished)
            return WINDROW_OK;
        /* An earlier call asked for more and did not get it; this one is content. */
        job->progress.finished = 1;
        return commit(job, NULL, 0);
    }
    job->progress.finished = 0;
    windrow_web_of_store(job->store, &job->web);
    if (job->web.pages == 0)
        return windrow_fail(WINDROW_INPUT, "the store %s has no pages, so that there is nothing to rank", options->store);
    if ((status = windrow_web_check(&job->web)))
        return status;
    if ((status = windrow_crew_create(options->threads ? options->threads : 1, &job->crew)))
        return status;
    if ((status = prepare_memory(job)))
        return status;
    if ((status = resume(job)))
        return status;
    struct windrow_certificate certificate;
    bool enough = false;
    if ((status = solve(job, &certificate, &enough)))
        return status;
    if ((status = publish(job, &certificate, enough)))
        return status;
    if (enough)
        return WINDROW_OK;
    return windrow_fail(WINDROW_RESOURCE,
                        "double precision cannot prove what was asked for on these %llu pages: %.1f digits and an error_l1 of %.2g are proven, and kept",
                        (unsigned long long)job->web.pages, windrow_certificate_digits(&certificate), certificate.error_l1);
}

enum windrow_status windrow_rank(const struct windrow_rank_options *options, bool *already_done)
{
    enum windrow_status status = check_options(options);
    bool done = false;
    if (status)
        return status;
    struct job *job = calloc(1, sizeof *job);
    if (!job)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while beginning to rank");
    job->options = options;
    job->name = options->run ? options->run : "main";
    job->lock = job->scratch = -1;
    job->digits = options->digits;
    job->error = options->error;
    if (job->digits == 0 && job->error == 0)
        job->digits = 6;
    job->began = job->last_checkpoint = job->last_commit = windrow_seconds();
    windrow_meter_start(&job->meter, &options->watch);
    status = run_job(job, &done);
    windrow_meter_finish(&job->meter);
    windrow_solver_destroy(job->solver);
    windrow_tiles_close(job->tiles);
    if (job->scratch >= 0)
        windrow_files.close(job->scratch);
    windrow_crew_destroy(job->crew);
    windrow_ledger_close(job->ledger);
    windrow_store_close(job->store);
    if (job->lock >= 0)
        windrow_files.close(job->lock);
    free(job->directory);
    free(job->lock_path);
    free(job);
    if (already_done)
        *already_done = done;
    return status;
}
