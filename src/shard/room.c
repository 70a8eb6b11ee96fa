/* Whether a shard job has room on disk, asked before it begins. */
#include "windrow.h"

#include "base/file.h"
#include "store/store.h"

#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>

#define SAMPLE_BYTES (UINT64_C(32) << 20)
#define LITTLE_BYTES (UINT64_C(64) << 20) /* dumps of this size fit wherever they themselves did */

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

enum windrow_status windrow_shard_check_disk(const struct windrow_shard_options *options, struct windrow_plan *plan)
{
    *plan = (struct windrow_plan){0};
    uint64_t bytes, earlier = 0;
    if (!options->out || windrow_file_exists(options->out) || !dump_bytes(options, &bytes))
        return WINDROW_OK;
    if (options->add)
        earlier = windrow_directory_bytes(options->add);
    if (bytes >= LITTLE_BYTES) {
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
        if (status == WINDROW_STOPPED)
            return status;
        if (status) { /* ids, an @list, unreadable input: the job itself will say */
            *plan = (struct windrow_plan){0};
            return WINDROW_OK;
        }
    } else if (!earlier) {
        return WINDROW_OK;
    }
    /* An earlier store takes its own room again, and as much in scratch. */
    double store = plan->store_bytes.low + (double)earlier, scratch = plan->scratch_bytes.low + (double)earlier;
    double together = plan->disk_bytes.low + 2 * (double)earlier;
    char *out = existing_parent(options->out), *temporary = existing_parent(options->temporary ? options->temporary : options->out);
    enum windrow_status status = out && temporary ? WINDROW_OK : windrow_fail(WINDROW_RESOURCE, "out of memory");
    if (!status) {
        uint64_t out_free = windrow_disk_free_bytes(out), temporary_free = windrow_disk_free_bytes(temporary);
        struct stat out_facts, temporary_facts;
        bool same = stat(out, &out_facts) || stat(temporary, &temporary_facts) || out_facts.st_dev == temporary_facts.st_dev;
        if (same && together > (double)out_free)
            status = missing(options->out, together, out_free);
        else if (!same && store > (double)out_free)
            status = missing(options->out, store, out_free);
        else if (!same && scratch > (double)temporary_free)
            status = missing(options->temporary, scratch, temporary_free);
    }
    free(out);
    free(temporary);
    return status;
}
