/* Whether a shard job has room on disk, asked before it begins. */
#include "windrow.h"

#include "base/file.h"
#include "dump/paths.h"
#include "store/store.h"

#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>

/* Planning takes about as long as sharding the sample: a small share of what a job takes that is worth planning. */
#define SAMPLE_BYTES (UINT64_C(16) << 20)
#define LITTLE_BYTES (UINT64_C(4) << 30)

/* The directory that a path that may not exist yet would be made in. */
static char *existing_parent(const char *path)
{
    char *parent = strdup(path && *path ? path : ".");
    while (parent && !windrow_file_exists(parent)) {
        char *slash = strrchr(parent, '/');
        if (!slash || slash == parent) {
            strcpy(parent, slash ? "/" : ".");
            break;
        }
        *slash = 0;
    }
    return parent;
}

/* Bytes of all dumps; false when one of them is no regular file. */
static bool dump_bytes(const struct windrow_shard_options *options, uint64_t *bytes)
{
    *bytes = 0;
    for (size_t dump = 0; dump < options->dump_count; dump++) {
        struct stat facts;
        if (stat(options->dumps[dump], &facts) || !(S_ISREG(facts.st_mode) || S_ISDIR(facts.st_mode)))
            return false;
        *bytes += S_ISDIR(facts.st_mode) ? windrow_directory_bytes(options->dumps[dump]) : (uint64_t)facts.st_size;
    }
    return true;
}

static enum windrow_status missing(const char *place, double needed, uint64_t free_bytes)
{
    return windrow_fail(WINDROW_RESOURCE, "the file system of %s has %llu bytes free, and the job takes at least %.0f: %.0f bytes are missing; "
                                          "make room, or name another --out or --tmp", place, (unsigned long long)free_bytes, needed,
                        needed - (double)free_bytes);
}

static enum windrow_status plan_sample(const struct windrow_shard_options *options, struct windrow_plan *plan)
{
    struct windrow_plan_options planning;
    windrow_plan_defaults(&planning);
    planning.dumps = options->dumps;
    planning.dump_count = options->dump_count;
    planning.shape = options->shape;
    planning.memory_bytes = options->memory_bytes;
    planning.threads = options->threads;
    planning.temporary = options->temporary;
    planning.sample_bytes = SAMPLE_BYTES;
    planning.keep_nofollow = options->keep_nofollow;
    planning.watch.stop = options->watch.stop;
    enum windrow_status status = windrow_plan(&planning, plan);
    if (!status || status == WINDROW_STOPPED)
        return status;
    *plan = (struct windrow_plan){0}; /* ids, an @list, unreadable input: the job itself will say */
    return WINDROW_OK;
}

/* Compares what is needed with what is free; an earlier store takes its own room again, and as much in scratch. */
static enum windrow_status compare(const struct windrow_shard_options *options, const struct windrow_plan *plan, uint64_t earlier, const char *out,
                                   const char *temporary)
{
    uint64_t out_free = windrow_disk_free_bytes(out), temporary_free = windrow_disk_free_bytes(temporary);
    struct stat out_facts, temporary_facts;
    bool same = stat(out, &out_facts) || stat(temporary, &temporary_facts) || out_facts.st_dev == temporary_facts.st_dev;
    double store = plan->store_bytes.low + (double)earlier, scratch = plan->scratch_bytes.low + (double)earlier;
    double together = plan->disk_bytes.low + 2 * (double)earlier;
    if (same && together > (double)out_free)
        return missing(options->out, together, out_free);
    if (!same && store > (double)out_free)
        return missing(options->out, store, out_free);
    if (!same && scratch > (double)temporary_free)
        return missing(options->temporary, scratch, temporary_free);
    return WINDROW_OK;
}

static enum windrow_status check(const struct windrow_shard_options *options, struct windrow_plan *plan)
{
    uint64_t bytes;
    if (!options->out || windrow_file_exists(options->out) || !dump_bytes(options, &bytes))
        return WINDROW_OK;
    uint64_t earlier = options->add ? windrow_directory_bytes(options->add) : 0;
    char *out = existing_parent(options->out), *temporary = existing_parent(options->temporary ? options->temporary : options->out);
    enum windrow_status status = out && temporary ? WINDROW_OK : windrow_fail(WINDROW_RESOURCE, "out of memory");
    /* Little dumps on a roomy disk need no planning: even of the best compressed ones a job takes no more than twice their size. */
    bool roomy = !status && 2 * (bytes + earlier) < windrow_disk_free_bytes(out) && 2 * (bytes + earlier) < windrow_disk_free_bytes(temporary);
    if (!status && (bytes >= LITTLE_BYTES || !roomy)) {
        status = plan_sample(options, plan);
        if (!status)
            status = compare(options, plan, earlier, out, temporary);
    }
    free(out);
    free(temporary);
    return status;
}

enum windrow_status windrow_shard_check_disk(const struct windrow_shard_options *options, struct windrow_plan *plan)
{
    *plan = (struct windrow_plan){0};
    struct windrow_dump_paths paths = {0};
    enum windrow_status status = windrow_dump_paths_expand(options->dumps, options->dump_count, &paths);
    struct windrow_shard_options expanded = *options;
    expanded.dumps = (const char *const *)paths.paths;
    expanded.dump_count = paths.count;
    /* What cannot be expanded, the job itself will say. */
    status = status ? WINDROW_OK : check(&expanded, plan);
    windrow_dump_paths_free(&paths);
    return status;
}
