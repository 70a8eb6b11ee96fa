#include "shard/plan.h"

#include "base/crew.h"
#include "base/file.h"
#include "dump/paths.h"
#include "shard/census.h"
#include "shard/variants.h"
#include "store/layout.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

/* Measured on stores of crawlgen (-n 5M -s 1, -n 20M -s 3, -n 5M -m -s 5), on four documentation webs (cppreference, OpenJDK 17,
 * Erlang, GHC; 1,000 to 10,000 crawled pages) and on a package dependency graph of 69,000 pages, 2 threads. */

/* Fixed by the layout (FORMAT.md, store/layout.h): two degrees a core page, a record a host, a record for 512 pages. */
#define CORE_PAGE_BYTES 8.0
#define HOST_BYTES ((double)sizeof(struct windrow_host_record))
#define CORE_MAP_PAGE_BYTES ((double)sizeof(struct windrow_core_group) / WINDROW_CORE_GROUP_PAGES)
/* Manifest records of blocks: 20 KB more for 17 M links. Manifest and ledger of an empty store, and the rounding of a dozen files. */
#define MANIFEST_LINK_BYTES 0.0012
#define STORE_OWN_BYTES 80e3
#define STORE_LOG_BYTES 120e3 /* malformed lines: a thousand at most are kept */
/* Scratch at its largest, and scratch and store together, over the finished store: 1.2 to 1.6 and 1.3 to 1.75. */
static const struct windrow_interval scratch_ratio = {1.1, 1.5, 1.8}, disk_ratio = {1.2, 1.65, 2.0};
/* What nobody has measured yet. */
#define USUAL_LINK_BITS 6.0
#define USUAL_PAGE_BYTES 6.0
#define USUAL_NAME_BYTES 26.0
#define USUAL_HOST_PAGES 20.0

/* Links take more bits in a larger crawl: from places of a sixty-fourth, a sixteenth and a quarter of the 20 M crawl 4.5, 4.8, 5.2 bits,
 * of all of it 5.2. Where few hosts are most of the crawl, they take fewer, since lists become complete: from a sixteenth of the real
 * webs 1.0 to 6.3 times the bits of the whole. Page names share more when there are more: 6.4, 5.9, 5.4 and 5.1 bytes. */
#define LINK_BITS_DOUBLING 0.12
#define LINK_BITS_DOUBLING_MOST 0.3
#define LINK_BITS_LEAST_POWER 0.7
#define LINK_BITS_LEAST_SHARE 0.1
#define PAGE_BYTES_DOUBLING 0.035
#define PAGE_BYTES_DOUBLING_MOST 0.08

/* Ranking: memory of all vectors that a run keeps, a core page. */
#define VECTOR_CORE_PAGE_BYTES 52.0
#define VECTOR_RIM_PAGE_BYTES 8.0
/* Of the stripe that is swept, when the vectors do not fit: of each of its core pages; and what all of the store keeps mapped. */
#define STRIPE_PAGE_BYTES 28.0
#define MAPPED_HOST_BYTES 41.0
#define MAPPED_PAGE_BYTES (1.0 / 3)
#define STRIPES_MOST 64
/* Files of a run: 44 bytes a core page, 16 a page (78.6 MB and 22.4 MB for the two larger crawls). */
#define RUN_CORE_PAGE_BYTES 44.0
#define RUN_PAGE_BYTES 16.0
/* A link's visit on one thread; ordering and writing, a page; passes over the core to an error_l1 of 1e-9: 12 to 21 sweeps and
 * some more for the certificate. */
#define VISIT_SECONDS 9e-9
#define PAGE_SECONDS 0.5e-6
#define RANK_OWN_SECONDS 0.1
static const struct windrow_interval sweeps = {13, 18, 30}, speed = {0.6, 1, 1.7};

#define TRIAL_MEMORY_LEAST (UINT64_C(64) << 20)
#define TRIAL_MEMORY_BYTES 2 /* for a byte of dump */

/* A beginning need not be like the rest. */
#define PREFIX_LEAST 0.75
#define PREFIX_MOST 1.33

/* ---- Disk ---- */

static double store_bytes(const struct windrow_plan_sizes *sizes)
{
    double link_bits = sizes->link_bits > 0 ? sizes->link_bits : USUAL_LINK_BITS;
    double page_bytes = sizes->page_bytes > 0 ? sizes->page_bytes : USUAL_PAGE_BYTES;
    double name_bytes = sizes->name_bytes > 0 ? sizes->name_bytes : USUAL_NAME_BYTES;
    return STORE_OWN_BYTES + sizes->links * (link_bits / 8 + MANIFEST_LINK_BYTES) + sizes->pages * (page_bytes + CORE_MAP_PAGE_BYTES) +
           sizes->core_pages * CORE_PAGE_BYTES + sizes->hosts * (HOST_BYTES + name_bytes);
}

struct windrow_plan_disk windrow_plan_sizes_disk(const struct windrow_plan_sizes *sizes)
{
    double store = store_bytes(sizes);
    return (struct windrow_plan_disk){(uint64_t)store, (uint64_t)(store * scratch_ratio.point), (uint64_t)(store * disk_ratio.point)};
}

struct windrow_plan_disk windrow_plan_disk(uint64_t links, uint64_t pages)
{
    return windrow_plan_sizes_disk(&(struct windrow_plan_sizes){.links = (double)links, .pages = (double)pages, .core_pages = (double)pages,
                                                                .hosts = (double)pages / USUAL_HOST_PAGES});
}

/* ---- Intervals ---- */

static struct windrow_interval scaled(struct windrow_interval interval, double factor)
{
    return (struct windrow_interval){interval.low * factor, interval.point * factor, interval.high * factor};
}

static struct windrow_interval product(struct windrow_interval a, struct windrow_interval b)
{
    return (struct windrow_interval){a.low * b.low, a.point * b.point, a.high * b.high};
}

static struct windrow_interval widened(struct windrow_interval interval, double least, double most)
{
    return (struct windrow_interval){interval.low * least, interval.point, interval.high * most};
}

/* The share of pages that do not belong to a part. */
static struct windrow_interval rest_share(struct windrow_interval part, struct windrow_interval pages)
{
    if (pages.point <= 0)
        return (struct windrow_interval){0};
    return (struct windrow_interval){fmax(1 - part.high / fmax(pages.low, 1), 0), fmax(1 - part.point / pages.point, 0),
                                     fmin(fmax(1 - part.low / pages.high, 0), 1)};
}

/* ---- Counts ---- */

/* Beginnings say less, also of what is met again; and what was seen is there. */
static struct windrow_interval guarded(const struct windrow_plan *plan, struct windrow_interval interval, double least)
{
    if (plan->basis == WINDROW_PLAN_PREFIX && plan->share < 1)
        interval = widened(interval, PREFIX_LEAST, PREFIX_MOST);
    if (interval.low < least && plan->share < 1)
        interval.low = least;
    return interval;
}

static enum windrow_status count(const struct windrow_plan *plan, const struct windrow_census *census, const struct windrow_sample *sample,
                                 enum windrow_sample_aspect aspect, struct windrow_interval *interval)
{
    double seen = sample->halvings ? 0 : windrow_sample_count(sample, aspect);
    enum windrow_status status = windrow_sample_estimate(sample, aspect, census->places, plan->share, interval);
    if (plan->basis == WINDROW_PLAN_PREFIX)
        interval->high = fmax(interval->high, windrow_sample_count(sample, aspect) / plan->share);
    *interval = guarded(plan, *interval, seen);
    return status;
}

static struct windrow_interval read_share(const struct windrow_plan *plan, const struct windrow_census *census, uint64_t read)
{
    double whole = (double)read / plan->share, unsure = 2 * census->unevenness * (plan->share < 1);
    return guarded(plan, (struct windrow_interval){whole * fmax(1 - unsure, 0), whole, whole * (1 + unsure)}, (double)read);
}

/* Which share of the links ends at a core page: from the links whose target is in the page sample. A target whose own line was not read
 * may be a core page all the same. */
static struct windrow_interval core_link_share(const struct windrow_census *census, double share)
{
    uint64_t known = 0, core = 0;
    for (uint32_t index = 0; index < census->links.count; index++) {
        const struct windrow_sample_entry *link = &census->links.entries[index];
        const struct windrow_sample_entry *target = windrow_sample_find(&census->pages, link->note[0], link->note[1]);
        known += target != NULL;
        core += target && target->places[WINDROW_SAMPLE_LINKING];
    }
    if (!known)
        return (struct windrow_interval){0, 1, 1};
    double part = (double)core / (double)known, spread = 3 * sqrt(part * (1 - part) / (double)known), high = fmin(part / share, 1);
    return (struct windrow_interval){fmax(part - spread, 0), sqrt(part * high), fmin(high + spread / share, 1)};
}

static int group_order(const void *a, const void *b)
{
    const struct windrow_sample_entry *left = a, *right = b;
    if (left->group != right->group)
        return left->group < right->group ? -1 : 1;
    return left->note[0] > right->note[0] ? -1 : left->note[0] < right->note[0]; /* the one that stands for all first */
}

/* Sorts the page sample, so comes last. */
static void count_variants(struct windrow_plan *plan, struct windrow_census *census)
{
    struct windrow_sample *pages = &census->pages;
    struct windrow_variant_counts counts = {0};
    if (pages->count)
        qsort(pages->entries, pages->count, sizeof *pages->entries, group_order);
    for (uint32_t index = 1, first = 0; index < pages->count; index++) {
        if (pages->entries[index].group == pages->entries[first].group)
            windrow_variants_count(&counts, (unsigned)pages->entries[index].note[0], (unsigned)pages->entries[first].note[0]);
        else
            first = index;
    }
    double scale = ldexp(1, (int)pages->halvings), seen = (double)pages->count * scale;
    double growth = seen > 0 ? fmax(plan->pages.point / seen, 1) : 1;
    double low = (double)counts.pages * scale, noise = 3 * sqrt((double)counts.pages) * scale * (pages->halvings > 0);
    /* Two of a kind meet more often in a larger part: at most as the square of what is read. */
    plan->variants = (struct windrow_interval){fmax(low - noise, 0), low * growth, (low + noise) * growth / plan->share};
    plan->variant_kinds = (struct windrow_variant_counts){
        (uint64_t)(low * growth), (uint64_t)((double)counts.by_scheme * scale * growth), (uint64_t)((double)counts.by_www * scale * growth),
        (uint64_t)((double)counts.by_slash * scale * growth), (uint64_t)((double)counts.by_several * scale * growth), (uint64_t)scale};
}

/* ---- The trial ---- */

struct trial {
    double share;        /* of the dumps */
    uint64_t bytes;      /* of its text */
    double fields;       /* its URL fields, about */
    double seconds;
    double link_bits, page_bytes, name_bytes;
};

static double part_bytes(const struct windrow_manifest *manifest, const char *prefix)
{
    double bytes = 0;
    for (size_t file = 0; file < manifest->file_count; file++)
        if (strncmp(manifest->files[file].name, prefix, strlen(prefix)) == 0)
            bytes += (double)manifest->files[file].bytes;
    return bytes;
}

static enum windrow_status shard_on_trial(const struct windrow_plan_options *options, const char *directory, const char *dump, enum windrow_shape shape,
                                          struct trial *trial)
{
    struct windrow_store *store = NULL;
    struct windrow_shard_options shard;
    char *out = windrow_path(directory, "store");
    if (!out)
        return windrow_fail(WINDROW_RESOURCE, "out of memory for a path");
    windrow_shard_defaults(&shard);
    shard.out = out;
    shard.dumps = &dump;
    shard.dump_count = 1;
    shard.shape = shape;
    /* No more than it has a use for: clearing memory would be most of a small trial's time. */
    uint64_t useful = TRIAL_MEMORY_LEAST + TRIAL_MEMORY_BYTES * trial->bytes;
    shard.memory_bytes = options->memory_bytes < useful ? options->memory_bytes : useful;
    shard.threads = options->threads;
    shard.keep_nofollow = options->keep_nofollow;
    shard.bad_max = 1;
    shard.watch.stop = options->watch.stop;
    double began = windrow_seconds();
    enum windrow_status status = windrow_shard(&shard, NULL);
    trial->seconds = windrow_seconds() - began;
    if (!status)
        status = windrow_store_open(out, &store);
    if (!status) {
        const struct windrow_store_facts *facts = windrow_store_facts(store);
        const struct windrow_manifest *manifest = windrow_store_manifest(store);
        trial->link_bits = facts->links ? part_bytes(manifest, "links/") * 8 / (double)facts->links : 0;
        trial->page_bytes = facts->pages ? part_bytes(manifest, "pages/") / (double)facts->pages : 0;
        trial->name_bytes = facts->hosts ? part_bytes(manifest, "host-names") / (double)facts->hosts : 0;
    }
    windrow_store_close(store);
    free(out);
    return status == WINDROW_OK || status == WINDROW_STOPPED ? status : windrow_fail_within(status, "sharding a sample for trial");
}

/* ---- What follows from the counts ---- */

static void plan_disk(struct windrow_plan *plan, const struct trial *trial)
{
    double doublings = trial->share < 1 ? -log2(trial->share) : 0;
    plan->link_bits = (struct windrow_interval){trial->link_bits * fmax(pow(trial->share, LINK_BITS_LEAST_POWER), LINK_BITS_LEAST_SHARE),
                                                trial->link_bits + LINK_BITS_DOUBLING * doublings,
                                                trial->link_bits + LINK_BITS_DOUBLING_MOST * doublings};
    double least = fmax(1 - PAGE_BYTES_DOUBLING_MOST * doublings, 0.5), usual = fmax(1 - PAGE_BYTES_DOUBLING * doublings, 0.7);
    struct windrow_interval page_bytes = scaled((struct windrow_interval){least, usual, 1}, trial->page_bytes);
    if (trial->share >= 1) /* sharded already; only threads and batches may differ */
        plan->link_bits = (struct windrow_interval){trial->link_bits * 0.98, trial->link_bits, trial->link_bits * 1.02};
    struct windrow_plan_sizes low = {plan->links.low, plan->pages.low, plan->core_pages.low, plan->hosts.low, plan->link_bits.low, page_bytes.low,
                                     trial->name_bytes};
    struct windrow_plan_sizes point = {plan->links.point, plan->pages.point, plan->core_pages.point, plan->hosts.point, plan->link_bits.point,
                                       page_bytes.point, trial->name_bytes};
    struct windrow_plan_sizes high = {plan->links.high, plan->pages.high, plan->core_pages.high, plan->hosts.high, plan->link_bits.high, page_bytes.high,
                                      trial->name_bytes};
    plan->store_bytes = (struct windrow_interval){0.95 * store_bytes(&low), store_bytes(&point), 1.05 * store_bytes(&high) + STORE_LOG_BYTES};
    plan->scratch_bytes = product(plan->store_bytes, scratch_ratio);
    plan->disk_bytes = product(plan->store_bytes, disk_ratio);
    plan->run_bytes = (struct windrow_interval){
        0.9 * (RUN_PAGE_BYTES * plan->pages.low + RUN_CORE_PAGE_BYTES * plan->core_pages.low),
        RUN_PAGE_BYTES * plan->pages.point + RUN_CORE_PAGE_BYTES * plan->core_pages.point,
        1.1 * (RUN_PAGE_BYTES * plan->pages.high + RUN_CORE_PAGE_BYTES * plan->core_pages.high)};
}

static void plan_time(struct windrow_plan *plan, const struct trial *trial, unsigned threads)
{
    double processors = windrow_crew_default_workers();
    double visit_seconds = VISIT_SECONDS / fmin((double)threads, processors);
    plan->shard_seconds = trial->fields > 0 ? product(scaled(plan->fields, trial->seconds / trial->fields), speed) : (struct windrow_interval){0};
    plan->sweep_seconds = product(scaled(plan->core_links, visit_seconds), speed);
    struct windrow_interval beside = product(scaled(plan->pages, PAGE_SECONDS), speed), passes = product(scaled(plan->core_links, visit_seconds), sweeps);
    plan->rank_seconds = product(passes, speed);
    plan->rank_seconds = (struct windrow_interval){plan->rank_seconds.low + beside.low, RANK_OWN_SECONDS + plan->rank_seconds.point + beside.point,
                                                   2 * RANK_OWN_SECONDS + plan->rank_seconds.high + beside.high};
}

static enum windrow_status plan_counts(struct windrow_plan *plan, struct windrow_census *census)
{
    const struct {
        const struct windrow_sample *sample;
        enum windrow_sample_aspect aspect;
        struct windrow_interval *interval;
    } counts[] = {
        {&census->pages, WINDROW_SAMPLE_MET, &plan->pages},        {&census->pages, WINDROW_SAMPLE_CRAWLED, &plan->crawled_pages},
        {&census->pages, WINDROW_SAMPLE_LINKING, &plan->core_pages}, {&census->hosts, WINDROW_SAMPLE_MET, &plan->hosts},
        {&census->links, WINDROW_SAMPLE_MET, &plan->links},
    };
    for (size_t index = 0; index < sizeof counts / sizeof counts[0]; index++) {
        enum windrow_status status = count(plan, census, counts[index].sample, counts[index].aspect, counts[index].interval);
        if (status)
            return status;
    }
    plan->lines = read_share(plan, census, census->lines);
    plan->fields = read_share(plan, census, census->fields);
    plan->core_links = product(plan->links, core_link_share(census, plan->share));
    plan->dangling_share = rest_share(plan->core_pages, plan->pages);
    plan->frontier_share = rest_share(plan->crawled_pages, plan->pages);
    count_variants(plan, census);
    return WINDROW_OK;
}

static double vector_bytes(double pages, double core_pages)
{
    return core_pages * VECTOR_CORE_PAGE_BYTES + (pages - core_pages) * VECTOR_RIM_PAGE_BYTES;
}

/* The fewest stripes whose working set fits; 0: the memory is too small for any. */
static unsigned stripes_for(const struct windrow_plan *plan, double memory_bytes)
{
    double mapped = plan->hosts.point * MAPPED_HOST_BYTES + plan->pages.point * MAPPED_PAGE_BYTES;
    for (unsigned stripes = 2; stripes <= STRIPES_MOST; stripes++)
        if (plan->core_pages.point * STRIPE_PAGE_BYTES / stripes + mapped <= memory_bytes)
            return stripes;
    return 0;
}

static enum windrow_status plan_within(const struct windrow_plan_options *options, const struct windrow_dump_paths *paths, const char *directory,
                                       struct windrow_meter *meter, struct windrow_plan *plan)
{
    struct windrow_places *places = NULL;
    struct windrow_crew *crew = NULL;
    struct windrow_census census = {0};
    struct trial trial = {.share = 1};
    char *dump = windrow_path(directory, "dump");
    enum windrow_status status = dump ? WINDROW_OK : windrow_fail(WINDROW_RESOURCE, "out of memory for a path");
    if (!status)
        status = windrow_places_open((const char *const *)paths->paths, paths->count, options->shape, options->full, options->sample_bytes, &places);
    if (!status)
        status = windrow_crew_create(options->threads, &crew);
    if (status)
        goto out;
    windrow_meter_stage(meter, "reading dumps", "URLs", 0);
    struct windrow_census_options census_options = {.places = places, .crew = crew, .meter = meter, .memory_bytes = options->memory_bytes / 2,
                                           .keep_nofollow = options->keep_nofollow, .trial_path = dump, .trial_bytes = options->sample_bytes};
    status = windrow_census_take(&census_options, &census);
    windrow_meter_stage_end(meter);
    if (status)
        goto out;
    plan->basis = windrow_places_basis(places);
    plan->share = windrow_places_share(places);
    if ((status = plan_counts(plan, &census)))
        goto out;
    double read_in_trial = census.bytes ? (double)census.trial_bytes / (double)census.bytes : 1;
    trial.share = fmin(plan->share * read_in_trial, 1);
    trial.fields = (double)census.fields * read_in_trial;
    trial.bytes = census.trial_bytes;
    /* What it takes is not wanted while the trial takes its own. */
    windrow_census_free(&census);
    windrow_places_close(places);
    places = NULL;
    if (plan->pages.point > 0) {
        windrow_meter_stage(meter, "sharding a sample for trial", "URLs", 0);
        status = shard_on_trial(options, directory, dump, census.trial_shape, &trial);
        windrow_meter_stage_end(meter);
    }
    if (status)
        goto out;
    plan_disk(plan, &trial);
    plan_time(plan, &trial, options->threads);
    plan->vector_bytes = (struct windrow_interval){vector_bytes(plan->pages.low, plan->core_pages.low), vector_bytes(plan->pages.point, plan->core_pages.point),
                                                   vector_bytes(plan->pages.high, plan->core_pages.high)};
    plan->vectors_fit = plan->vector_bytes.high <= (double)options->memory_bytes;
    plan->stripes = plan->vectors_fit ? 1 : stripes_for(plan, (double)options->memory_bytes);
out:
    windrow_census_free(&census);
    windrow_places_close(places);
    windrow_crew_destroy(crew);
    free(dump);
    return status;
}

void windrow_plan_defaults(struct windrow_plan_options *options)
{
    struct windrow_shard_options shard;
    windrow_shard_defaults(&shard);
    *options = (struct windrow_plan_options){.memory_bytes = shard.memory_bytes, .threads = shard.threads, .sample_bytes = UINT64_C(256) << 20};
}

enum windrow_status windrow_plan(const struct windrow_plan_options *options, struct windrow_plan *plan)
{
    *plan = (struct windrow_plan){0};
    if (!options->dump_count)
        return windrow_fail(WINDROW_USAGE, "name the dumps to plan for, or - for standard input");
    if (options->memory_bytes < UINT64_C(32) << 20)
        return windrow_fail(WINDROW_USAGE, "--memory must be at least 32M");
    if (!options->threads || options->threads > 1024)
        return windrow_fail(WINDROW_USAGE, "--threads must be 1 to 1024");
    const char *temporary = options->temporary ? options->temporary : getenv("TMPDIR");
    struct windrow_dump_paths paths = {0};
    struct windrow_meter meter;
    char *directory = windrow_path(temporary && *temporary ? temporary : "/tmp", "windrow-plan-XXXXXX");
    enum windrow_status status = directory ? WINDROW_OK : windrow_fail(WINDROW_RESOURCE, "out of memory for a path");
    if (!status)
        status = windrow_dump_paths_expand(options->dumps, options->dump_count, &paths);
    if (!status && !mkdtemp(directory))
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot make the directory %s for a sample; name another one with --tmp", directory);
    if (status)
        goto out;
    windrow_meter_start(&meter, &options->watch);
    status = plan_within(options, &paths, directory, &meter, plan);
    windrow_meter_finish(&meter);
    enum windrow_status removed = windrow_directory_remove(directory);
    status = status ? status : removed;
out:
    windrow_dump_paths_free(&paths);
    free(directory);
    return status;
}
