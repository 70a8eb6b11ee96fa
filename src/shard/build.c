#include "windrow.h"

#include "base/crew.h"
#include "dump/paths.h"
#include "shard/fold.h"
#include "shard/job.h"
#include "shard/linkmerge.h"
#include "shard/old.h"
#include "shard/part.h"
#include "shard/reading.h"
#include "shard/remap.h"
#include "shard/table.h"
#include "store/pages.h"
#include "url/domain.h"
#include "url/key.h"
#include "url/normal.h"

#include <errno.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/resource.h>
#include <unistd.h>
#include <xxhash.h>

/* The stages of a job, in order; each is made of tasks that leave durable files and a mark in the ledger, so
 * that any of them can be gone on with:
 *
 *   tables    names, aliases -> sorted tables         "names", "aliases"          (fold.c)
 *   reading   dumps -> batches                       marks: "reading", "run/N"   (reading.c)
 *   pages     key runs -> parts                      "part/N"                    (part.c)
 *   table     parts -> page table of each segment    "table/N"                   (table.c)
 *   remap     link runs -> page ids, core numbers    "remap/N"                   (remap.c)
 *   links     rewritten runs -> blocks of a segment  "links/N"                   (linkmerge.c)
 *   finish    degrees, aliases, manifest, seal       the seal                    (here)
 *
 * A stage's input is removed once the stage is through. The seal makes the store a store. */

#define MEMORY_LEAST (UINT64_C(48) << 20) /* merging a single batch takes 37 MiB */
#define MEMORY_OWN (UINT64_C(12) << 20) /* what the process takes before any data */

struct job {
    const struct windrow_shard_options *options;
    const char *store;
    char *scratch, *log_path;
    int lock;
    struct windrow_ledger *ledger;
    struct windrow_crew *crew;
    struct windrow_meter meter;
    struct windrow_fold fold;
    uint64_t fold_fingerprint;
    struct windrow_store *old;           /* the earlier store; NULL: none */
    struct windrow_reading_state reading;
    uint64_t *run_pages;
    struct windrow_part_plan plan;
    uint64_t *page_bases, *core_bases;   /* of parts */
    uint64_t segment_count;
    uint64_t *segment_cores;
    struct windrow_table_totals totals;
    const struct windrow_linkmerge *merge;
    uint64_t duplicates;                 /* links found in more than one batch */
    uint64_t memory_bytes;               /* for data */
    double began;                        /* of this process's work after reading */
    double seconds_before;               /* spent by earlier processes after reading */
};

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory; try a smaller --memory");
}

void windrow_shard_defaults(struct windrow_shard_options *options)
{
    *options = (struct windrow_shard_options){.memory_bytes = windrow_memory_machine_bytes() / 2, .threads = windrow_crew_default_workers(),
                                              .bad_max = 0.10};
}

/* ---- Tasks with marks in the ledger ---- */

struct stage {
    struct job *job;
    const char *name;
    enum windrow_status (*task)(struct job *job, uint64_t number);
    const char *const *spent;  /* scratch of a task's input that is removed with its mark; NULL-ended formats */
};

static enum windrow_status run_task(void *context, uint64_t number, unsigned worker)
{
    (void)worker;
    struct stage *stage = context;
    struct job *job = stage->job;
    char key[64];
    snprintf(key, sizeof key, "%s/%06llu", stage->name, (unsigned long long)number);
    enum windrow_status status = windrow_ledger_get(job->ledger, key, NULL, 0);
    if (status != WINDROW_NO)
        return status;
    if (windrow_meter_stopping(&job->meter))
        return windrow_fail(WINDROW_STOPPED, "stopped at a checkpoint; run the same command again to go on");
    if ((status = stage->task(job, number)) || (status = windrow_directory_sync(job->scratch)))
        return status;
    double seconds = job->seconds_before + windrow_seconds() - job->began;
    struct windrow_ledger_record records[] = {{key, NULL, 0}, {"seconds", &seconds, sizeof seconds}};
    if ((status = windrow_ledger_commit(job->ledger, records, 2)))
        return status;
    for (const char *const *format = stage->spent; format && *format; format++) {
        char *path = windrow_path(job->scratch, *format, (unsigned long long)number);
        if (path)
            windrow_file_remove(path);
        free(path);
    }
    return WINDROW_OK;
}

/* Runs a stage's tasks, as many at a time as threads and memory allow. */
static enum windrow_status run_stage(struct job *job, struct stage *stage, uint64_t count, uint64_t task_memory_bytes)
{
    uint64_t workers = windrow_crew_workers(job->crew), fitting = task_memory_bytes ? job->memory_bytes / task_memory_bytes : workers;
    if (!fitting)
        return windrow_fail(WINDROW_RESOURCE, "merging %llu batches needs %llu MiB; name a larger --memory",
                            (unsigned long long)job->reading.run_count, (unsigned long long)((task_memory_bytes + MEMORY_OWN) >> 20) + 1);
    stage->job = job;
    char key[64];
    snprintf(key, sizeof key, "count/%s", stage->name);
    struct windrow_ledger_record record = {key, &count, sizeof count};
    enum windrow_status status = windrow_ledger_commit(job->ledger, &record, 1);
    if (status)
        return status;
    if (fitting >= workers)
        return windrow_crew_run(job->crew, count, run_task, stage);
    struct windrow_crew *crew;
    status = windrow_crew_create((unsigned)fitting, &crew);
    if (status)
        return status;
    status = windrow_crew_run(crew, count, run_task, stage);
    windrow_crew_destroy(crew);
    return status;
}

static void remove_scratch(struct job *job, const char *format, uint64_t count)
{
    for (uint64_t number = 0; number < count; number++) {
        char name[64];
        snprintf(name, sizeof name, format, (unsigned long long)number);
        char *path = windrow_path(job->scratch, "%s", name);
        if (path)
            windrow_file_remove(path);
        free(path);
    }
}

/* ---- The stages ---- */

static enum windrow_status load_runs(struct job *job)
{
    job->run_pages = calloc(job->reading.run_count + 1, sizeof *job->run_pages);
    enum windrow_status status = job->run_pages ? WINDROW_OK : memory();
    for (uint64_t run = 0; !status && run < job->reading.run_count; run++) {
        char key[32];
        snprintf(key, sizeof key, "run/%06llu", (unsigned long long)run);
        status = windrow_ledger_get(job->ledger, key, &job->run_pages[run], sizeof job->run_pages[run]);
        if (status == WINDROW_NO)
            status = windrow_fail(WINDROW_DAMAGED, "the ledger of %s lacks batch %llu; remove the unfinished store and shard again", job->store,
                                  (unsigned long long)run);
    }
    return status;
}

/* The earlier store becomes the last runs. Its record and the higher count of runs are one commit. */
static enum windrow_status add_old(struct job *job)
{
    struct windrow_old_counts counts;
    struct windrow_buffer run_pages = {0}, names = {0}, records = {0};
    enum windrow_status status = windrow_ledger_get(job->ledger, "old", &counts, sizeof counts);
    if (status != WINDROW_NO)
        return status;
    windrow_meter_stage(&job->meter, "reading the earlier store", "links", 2 * windrow_store_facts(job->old)->links);
    status = windrow_old_write(job->old, job->scratch, job->reading.run_count, &job->fold, job->memory_bytes, &job->meter, &run_pages, &counts);
    windrow_meter_stage_end(&job->meter);
    const uint64_t *pages = (const uint64_t *)run_pages.data;
    if (!status)
        status = windrow_directory_sync(job->scratch);
    if (!status)
        status = windrow_buffer_reserve(&names, counts.runs * 32);
    if (!status)
        status = windrow_buffer_reserve(&records, (counts.runs + 2) * sizeof(struct windrow_ledger_record));
    if (!status) {
        struct windrow_ledger_record *record = (struct windrow_ledger_record *)records.data;
        for (uint64_t run = 0; run < counts.runs; run++) {
            char *key = (char *)names.data + run * 32;
            snprintf(key, 32, "run/%06llu", (unsigned long long)job->reading.run_count++);
            job->reading.run_pages += pages[run];
            record[run] = (struct windrow_ledger_record){key, &pages[run], sizeof pages[run]};
        }
        job->reading.links += counts.links;
        record[counts.runs] = (struct windrow_ledger_record){"old", &counts, sizeof counts};
        record[counts.runs + 1] = (struct windrow_ledger_record){"reading", &job->reading, sizeof job->reading};
        status = windrow_ledger_commit(job->ledger, record, counts.runs + 2);
    }
    windrow_buffer_free(&run_pages);
    windrow_buffer_free(&names);
    windrow_buffer_free(&records);
    return status;
}

struct alias_lines {
    struct windrow_writer writer;
    struct windrow_page_reader *to;
    char *url;
};

static enum windrow_status write_alias_line(void *context, const uint8_t *key, size_t key_bytes, uint64_t page)
{
    struct alias_lines *lines = context;
    const char *to;
    size_t to_bytes, from_bytes = windrow_key_url((const char *)key, key_bytes, lines->url, WINDROW_URL_BYTES_MAX);
    enum windrow_status status = windrow_page_reader_url(lines->to, page, &to, &to_bytes);
    if (!status)
        status = windrow_writer_append(&lines->writer, lines->url, from_bytes);
    if (!status)
        status = windrow_writer_append(&lines->writer, "\t", 1);
    if (!status)
        status = windrow_writer_append(&lines->writer, to, to_bytes);
    return status ? status : windrow_writer_append(&lines->writer, "\n", 1);
}

static enum windrow_status copy_lines(const char *path, struct windrow_writer *writer)
{
    const char *const paths[] = {path};
    struct windrow_dump_options options = {.paths = paths, .path_count = 1, .shape = WINDROW_DUMP_LISTS};
    struct windrow_dump_chunk chunk = {0};
    struct windrow_dump *dump = NULL;
    enum windrow_status status = windrow_dump_open(&options, NULL, &dump);
    while (!status && !(status = windrow_dump_read(dump, &chunk)) && chunk.bytes)
        status = windrow_writer_append(writer, chunk.text, chunk.bytes);
    windrow_dump_chunk_free(&chunk);
    windrow_dump_close(dump);
    return status;
}

/* The aliases of the earlier store stay in force; those of --aliases are added to them. Writes both to the file `path`. */
static enum windrow_status join_aliases(struct job *job, const char *path)
{
    struct alias_lines lines = {.writer.descriptor = -1, .url = malloc(WINDROW_URL_BYTES_MAX)};
    enum windrow_status status = lines.url ? windrow_page_reader_create(job->old, &lines.to) : memory();
    if (!status)
        status = windrow_writer_open(&lines.writer, path, false);
    if (!status)
        status = windrow_store_each_alias(job->old, write_alias_line, &lines);
    if (!status && job->options->aliases)
        status = copy_lines(job->options->aliases, &lines.writer);
    if (!status)
        status = windrow_writer_close(&lines.writer);
    windrow_writer_abandon(&lines.writer);
    windrow_page_reader_destroy(lines.to);
    free(lines.url);
    return status;
}

static enum windrow_status prepare_tables(struct job *job)
{
    struct windrow_shard_options options = *job->options;
    char *joined = NULL;
    enum windrow_status status = WINDROW_OK;
    if (job->old && windrow_store_has_aliases(job->old)) {
        job->fold.with_aliases = true;
        joined = windrow_path(job->scratch, "joined-aliases");
        options.aliases = joined;
        struct windrow_alias_facts made;
        status = !joined ? memory() : windrow_ledger_get(job->ledger, "aliases", &made, sizeof made);
        if (status == WINDROW_NO)
            status = join_aliases(job, joined);
    }
    if (!status)
        status = windrow_fold_prepare(&job->fold, &options, job->ledger, job->memory_bytes, &job->meter);
    if (joined && !status)
        status = windrow_file_remove(joined);
    free(joined);
    return status;
}

static enum windrow_status read_dumps(struct job *job)
{
    enum windrow_status status = windrow_ledger_get(job->ledger, "reading", &job->reading, sizeof job->reading);
    if (status == WINDROW_NO)
        status = WINDROW_OK;
    if (!status && !job->reading.finished && job->options->dump_count) {
        struct windrow_reading reading = {.options = job->options, .fold = &job->fold, .scratch = job->scratch, .log_path = job->log_path,
                                          .ledger = job->ledger, .crew = job->crew, .meter = &job->meter, .memory_bytes = job->memory_bytes,
                                          .merge_memory_bytes = job->memory_bytes};
        windrow_meter_stage(&job->meter, "reading dumps", "URLs", 0);
        status = windrow_reading_run(&reading, &job->reading);
        windrow_meter_stage_end(&job->meter);
    }
    if (!status && job->old)
        status = add_old(job);
    return status ? status : load_runs(job);
}

static enum windrow_status part_task(struct job *job, uint64_t part)
{
    enum windrow_status status = windrow_part_merge(job->scratch, job->reading.run_count, &job->plan, part);
    struct windrow_part_facts facts;
    if (!status && !(status = windrow_part_facts_load(job->scratch, part, &facts)))
        windrow_meter_add(&job->meter, facts.pages);
    return status;
}

/* The number of parts is written down before the first is merged: the plan is made from the key runs, which go when all
 * parts are there. */
static enum windrow_status merge_pages(struct job *job)
{
    uint64_t part_count;
    enum windrow_status status = windrow_ledger_get(job->ledger, "pages", &part_count, sizeof part_count);
    if (status == WINDROW_NO) {
        if ((status = windrow_part_plan(job->scratch, job->reading.run_count, &job->plan)))
            return status;
        windrow_meter_stage(&job->meter, "merging pages", "pages", 0);
        struct stage stage = {.name = "part", .task = part_task};
        if ((status = run_stage(job, &stage, job->plan.part_count, windrow_part_memory_bytes(job->reading.run_count))))
            return status;
        windrow_meter_stage_end(&job->meter);
        part_count = job->plan.part_count;
        struct windrow_ledger_record record = {"pages", &part_count, sizeof part_count};
        if ((status = windrow_ledger_commit(job->ledger, &record, 1)))
            return status;
    }
    if (status)
        return status;
    remove_scratch(job, "batch-%06llu.keys", job->reading.run_count);
    remove_scratch(job, "batch-%06llu.keys.index", job->reading.run_count);
    job->plan.part_count = part_count;
    job->page_bases = calloc(part_count + 1, sizeof *job->page_bases);
    job->core_bases = calloc(part_count + 1, sizeof *job->core_bases);
    if (!job->page_bases || !job->core_bases)
        return memory();
    for (uint64_t part = 0; part < part_count; part++) {
        struct windrow_part_facts facts;
        if ((status = windrow_part_facts_load(job->scratch, part, &facts)))
            return status;
        job->page_bases[part + 1] = job->page_bases[part] + facts.pages;
        job->core_bases[part + 1] = job->core_bases[part] + facts.core_pages;
    }
    uint64_t pages = job->page_bases[part_count];
    job->segment_count = (pages + WINDROW_SEGMENT_PAGES - 1) / WINDROW_SEGMENT_PAGES;
    return WINDROW_OK;
}

static enum windrow_status table_task(struct job *job, uint64_t segment)
{
    struct windrow_table_parts parts = {job->scratch, job->plan.part_count, job->page_bases};
    enum windrow_status status = windrow_table_segment(&parts, job->store, segment);
    windrow_meter_add(&job->meter, 1);
    return status;
}

static enum windrow_status write_table(struct job *job)
{
    windrow_meter_stage(&job->meter, "writing the page table", "segments", job->segment_count);
    struct stage stage = {.name = "table", .task = table_task};
    enum windrow_status status = run_stage(job, &stage, job->segment_count, UINT64_C(24) << 20);
    job->segment_cores = calloc(job->segment_count + 1, sizeof *job->segment_cores);
    if (!status && !job->segment_cores)
        status = memory();
    if (!status)
        status = windrow_table_assemble(job->scratch, job->store, job->segment_count, job->segment_cores, &job->totals);
    windrow_meter_stage_end(&job->meter);
    if (!status) {
        remove_scratch(job, "part-%06llu", job->plan.part_count);
        remove_scratch(job, "part-%06llu.index", job->plan.part_count);
    }
    return status;
}

static enum windrow_status remap_task(struct job *job, uint64_t run)
{
    struct windrow_remap_parts parts = {job->scratch, job->plan.part_count, job->page_bases, job->core_bases};
    enum windrow_status status = windrow_remap_run(&parts, run, job->run_pages[run]);
    windrow_meter_add(&job->meter, 1);
    return status;
}

static enum windrow_status remap_links(struct job *job)
{
    uint64_t largest = 0;
    for (uint64_t run = 0; run < job->reading.run_count; run++)
        if (job->run_pages[run] > largest)
            largest = job->run_pages[run];
    windrow_meter_stage(&job->meter, "renumbering links", "batches", job->reading.run_count);
    static const char *const spent[] = {"batch-%06llu.links", NULL};
    struct stage stage = {.name = "remap", .task = remap_task, .spent = spent};
    enum windrow_status status = run_stage(job, &stage, job->reading.run_count, largest * 16 + (UINT64_C(4) << 20));
    windrow_meter_stage_end(&job->meter);
    if (!status)
        remove_scratch(job, "part-%06llu.maps", job->plan.part_count);
    return status;
}

/* What the link merge needs of the store, mapped. */
struct mapped {
    struct windrow_map core_map, hosts;
    struct windrow_linkmerge merge;
};

static enum windrow_status map_store(struct job *job, struct mapped *mapped)
{
    *mapped = (struct mapped){.core_map.descriptor = -1, .hosts.descriptor = -1};
    char *core_path = windrow_path(job->store, "core-map"), *host_path = windrow_path(job->store, "hosts");
    enum windrow_status status = core_path && host_path ? windrow_map_open(&mapped->core_map, core_path) : memory();
    if (!status)
        status = windrow_map_open(&mapped->hosts, host_path);
    free(core_path);
    free(host_path);
    mapped->merge = (struct windrow_linkmerge){.scratch = job->scratch, .store = job->store, .run_count = job->reading.run_count,
        .pages = job->totals.pages, .core_pages = job->totals.core_pages, .segment_count = job->segment_count, .segment_cores = job->segment_cores,
        .core_groups = (const struct windrow_core_group *)mapped->core_map.data, .hosts = (const struct windrow_host_record *)mapped->hosts.data,
        .host_count = job->totals.hosts, .meter = &job->meter};
    return status;
}

static enum windrow_status links_task(struct job *job, uint64_t segment)
{
    return windrow_linkmerge_segment(job->merge, segment);
}

static enum windrow_status merge_links(struct job *job, const struct windrow_linkmerge *merge)
{
    windrow_meter_stage(&job->meter, "merging links", "links", job->reading.links);
    struct stage stage = {.name = "links", .task = links_task};
    job->merge = merge;
    enum windrow_status status = run_stage(job, &stage, job->segment_count, windrow_linkmerge_memory_bytes(job->reading.run_count));
    windrow_meter_stage_end(&job->meter);
    if (!status) {
        remove_scratch(job, "batch-%06llu.sorted", job->reading.run_count);
        remove_scratch(job, "batch-%06llu.sorted.index", job->reading.run_count);
        status = windrow_linkmerge_degrees(merge, job->memory_bytes);
    }
    return status;
}

/* ---- Finish ---- */

static enum windrow_status add_flat_file(struct job *job, struct windrow_manifest *manifest, const char *name)
{
    char *path = windrow_path(job->store, "%s", name);
    uint64_t bytes, checksum;
    enum windrow_status status = path ? windrow_file_checksum(path, &bytes, &checksum) : memory();
    free(path);
    return status ? status : windrow_manifest_add_file(manifest, name, bytes, checksum);
}

static enum windrow_status add_segments(struct job *job, struct windrow_manifest *manifest)
{
    enum windrow_status status = WINDROW_OK;
    struct windrow_buffer records = {0};
    uint64_t duplicates = 0;
    for (uint64_t segment = 0; !status && segment < job->segment_count; segment++) {
        struct windrow_linkmerge_head head;
        uint64_t bytes, checksum;
        char name[64];
        if ((status = windrow_linkmerge_head(job->scratch, segment, &head, &records)) ||
            (status = windrow_table_page_file(job->scratch, segment, &bytes, &checksum)))
            break;
        snprintf(name, sizeof name, "pages/%06llu.zst", (unsigned long long)segment);
        if ((status = windrow_manifest_add_file(manifest, name, bytes, checksum)))
            break;
        const struct windrow_block_record *record = (const struct windrow_block_record *)records.data;
        for (int kind = 0; !status && kind < WINDROW_BLOCK_KINDS; kind++) {
            status = windrow_manifest_add_blocks(manifest, kind, record, head.block_counts[kind]);
            record += head.block_counts[kind];
            windrow_layout_block_file(name, sizeof name, kind, segment);
            if (!status)
                status = windrow_manifest_add_file(manifest, name, head.file_bytes[kind], head.file_checksums[kind]);
        }
        manifest->facts.links += head.links;
        manifest->facts.core_links += head.core_links;
        duplicates += head.duplicates;
    }
    job->duplicates = duplicates;
    windrow_buffer_free(&records);
    return status;
}

/* The table of folded URLs names pages by their ids, so it is written when all else of the store can be read;
 * `manifest` knows that much, and is used up. */
static enum windrow_status write_aliases(struct job *job, struct windrow_manifest *manifest)
{
    struct windrow_store *store = NULL;
    enum windrow_status status = windrow_store_open_manifest(job->store, manifest, &store);
    if (!status)
        status = windrow_alias_write(job->scratch, store, job->store, job->memory_bytes);
    windrow_store_close(store);
    return status;
}

static enum windrow_status describe(struct job *job, struct windrow_manifest *manifest, bool with_aliases)
{
    static const char *const flats[] = {"page-index", "page-keys", "hosts", "host-names", "core-map", "degrees", "inside-degrees",
                                        "aliases.zst", "alias-index", "alias-keys"};
    *manifest = (struct windrow_manifest){.facts = {.pages = job->totals.pages, .core_pages = job->totals.core_pages,
                                                    .crawled_pages = job->totals.crawled_pages, .hosts = job->totals.hosts,
                                                    .dangling_pages = job->totals.pages - job->totals.core_pages, .key_bytes = job->totals.key_bytes}};
    enum windrow_status status = WINDROW_OK;
    for (size_t flat = 0; !status && flat < (with_aliases ? 10u : 7u); flat++)
        status = add_flat_file(job, manifest, flats[flat]);
    if (!status)
        status = add_segments(job, manifest);
    manifest->domain_library = strdup(windrow_domain_version());
    manifest->idn_library = strdup(windrow_url_idn_version());
    char zstd[32];
    snprintf(zstd, sizeof zstd, "zstd %s", ZSTD_versionString());
    manifest->zstd_library = strdup(zstd);
    if (!status && (!manifest->domain_library || !manifest->idn_library || !manifest->zstd_library))
        status = memory();
    return status;
}

static enum windrow_status finish(struct job *job)
{
    struct windrow_manifest manifest = {0};
    enum windrow_status status;
    if ((status = windrow_directory_sync(job->store)))
        return status;
    const char *const parts[] = {"pages", "links"};
    for (int part = 0; part < 2; part++) {
        char *path = windrow_path(job->store, "%s", parts[part]);
        status = path ? windrow_directory_sync(path) : memory();
        free(path);
        if (status)
            return status;
    }
    if (job->fold.aliases.count) {
        status = describe(job, &manifest, false);
        if (!status)
            status = write_aliases(job, &manifest);
        windrow_manifest_free(&manifest);
        if (!status)
            status = windrow_directory_sync(job->store);
    }
    if (!status)
        status = describe(job, &manifest, job->fold.aliases.count);
    if (!status)
        status = windrow_manifest_write(job->store, &manifest);
    windrow_manifest_free(&manifest);
    return status;
}

/* ---- The job ---- */

/* What must stay the same when a job is gone on with. Names of dumps, not their contents: those are checked as they are read. */
static uint64_t settings_fingerprint(const struct windrow_shard_options *options, uint64_t fold_fingerprint, const struct windrow_store *old)
{
    uint64_t sum = XXH3_64bits_withSeed(&options->shape, sizeof options->shape, options->keep_nofollow);
    for (size_t dump = 0; dump < options->dump_count; dump++)
        sum = XXH3_64bits_withSeed(options->dumps[dump], strlen(options->dumps[dump]) + 1, sum);
    if (old)
        sum = XXH3_64bits_withSeed(&windrow_store_facts(old)->fingerprint, sizeof(uint64_t), sum);
    return XXH3_64bits_withSeed(&fold_fingerprint, sizeof fold_fingerprint, sum);
}

/* The scratch of a job stays where it began. */
static enum windrow_status check_scratch(struct job *job)
{
    uint64_t now = XXH3_64bits(job->scratch, strlen(job->scratch)), then;
    enum windrow_status status = windrow_ledger_get(job->ledger, "scratch", &then, sizeof then);
    if (status == WINDROW_NO) {
        struct windrow_ledger_record record = {"scratch", &now, sizeof now};
        return windrow_ledger_commit(job->ledger, &record, 1);
    }
    bool finished = false;
    if (!status)
        status = windrow_job_finished(job->ledger, &finished);
    if (!status && now != then && !finished)
        status = windrow_fail(WINDROW_USAGE, "%s was begun with its scratch files elsewhere; go on with the --tmp of then (or without, as then)", job->store);
    return status;
}

static enum windrow_status check_settings(struct job *job)
{
    uint64_t now = settings_fingerprint(job->options, job->fold_fingerprint, job->old), then;
    enum windrow_status status = windrow_ledger_get(job->ledger, "settings", &then, sizeof then);
    if (status == WINDROW_NO) {
        struct windrow_ledger_record record = {"settings", &now, sizeof now};
        status = windrow_ledger_commit(job->ledger, &record, 1);
        return status ? status : check_scratch(job);
    }
    if (!status && now == then)
        return check_scratch(job);
    if (!status)
        status = windrow_fail(WINDROW_USAGE, "%s was begun from other dumps or with other settings (--shape, --nofollow, --names, --aliases, --drop, --add); name another --out, "
                                             "or remove it first", job->store);
    return status;
}

static enum windrow_status open_job(struct job *job)
{
    enum windrow_status status;
    char *ledger_path = windrow_path(job->store, "ledger"), *lock_path = windrow_path(job->store, "ledger/lock");
    char *pages_path = windrow_path(job->store, "pages"), *links_path = windrow_path(job->store, "links");
    job->log_path = windrow_path(job->store, "ledger/malformed.tsv");
    if (job->options->temporary) {
        /* Several jobs may share a directory for scratch: each has its own corner, found again by the store's full path. */
        char *full = realpath(job->store, NULL);
        job->scratch = windrow_path(job->options->temporary, "windrow-%016llx",
                                    (unsigned long long)(full ? XXH3_64bits(full, strlen(full)) : XXH3_64bits(job->store, strlen(job->store))));
        free(full);
    } else {
        job->scratch = windrow_path(job->store, "ledger/scratch");
    }
    if (!ledger_path || !lock_path || !pages_path || !links_path || !job->log_path || !job->scratch) {
        status = memory();
        goto out;
    }
    if ((status = windrow_directory_make(ledger_path)) || (status = windrow_ledger_lock(lock_path, &job->lock)) ||
        (status = windrow_ledger_open(ledger_path, false, &job->ledger)))
        goto out;
    if ((status = windrow_fold_open(job->options, job->scratch, &job->fold, &job->fold_fingerprint)))
        goto out;
    if (job->options->add && (status = windrow_store_open(job->options->add, &job->old)))
        goto out;
    if ((status = check_settings(job)) || (status = windrow_directory_make(job->scratch)) || (status = windrow_directory_make(pages_path)) ||
        (status = windrow_directory_make(links_path)))
        goto out;
    status = windrow_directory_sync(job->store);
out:
    free(ledger_path);
    free(lock_path);
    free(pages_path);
    free(links_path);
    return status;
}

static void close_job(struct job *job)
{
    windrow_ledger_close(job->ledger);
    windrow_crew_destroy(job->crew);
    windrow_fold_close(&job->fold);
    windrow_store_close(job->old);
    windrow_part_plan_free(&job->plan);
    windrow_meter_finish(&job->meter);
    if (job->lock >= 0)
        windrow_files.close(job->lock);
    free(job->scratch);
    free(job->log_path);
    free(job->run_pages);
    free(job->page_bases);
    free(job->core_bases);
    free(job->segment_cores);
}

static enum windrow_status work(struct job *job)
{
    enum windrow_status status;
    struct mapped mapped = {.core_map.descriptor = -1, .hosts.descriptor = -1};
    double began = windrow_seconds();
    if ((status = prepare_tables(job)) || (status = read_dumps(job)))
        return status;
    job->began = windrow_seconds();
    status = windrow_ledger_get(job->ledger, "seconds", &job->seconds_before, sizeof job->seconds_before);
    if (status && status != WINDROW_NO)
        return status;
    if ((status = merge_pages(job)) || (status = write_table(job)) || (status = remap_links(job)))
        return status;
    status = map_store(job, &mapped);
    if (!status)
        status = merge_links(job, &mapped.merge);
    windrow_map_close(&mapped.core_map);
    windrow_map_close(&mapped.hosts);
    if (!status)
        status = finish(job);
    if (status)
        return status;
    job->reading.dropped[WINDROW_DROP_DUPLICATE] += job->duplicates;
    return windrow_job_note(job->ledger, windrow_seconds() - began, job->reading.dropped);
}

static enum windrow_status check_options(const struct windrow_shard_options *options)
{
    if (!options->out || !*options->out)
        return windrow_fail(WINDROW_USAGE, "name the store to make with --out");
    if (!options->dump_count && !options->add)
        return windrow_fail(WINDROW_USAGE, "name the dumps to read, or - for standard input");
    if (options->memory_bytes < MEMORY_LEAST)
        return windrow_fail(WINDROW_USAGE, "--memory must be at least %lluM", (unsigned long long)(MEMORY_LEAST >> 20));
    if (!options->threads || options->threads > 1024)
        return windrow_fail(WINDROW_USAGE, "--threads must be 1 to 1024");
    return WINDROW_OK;
}

/* A directory that holds something else is not to be filled with a store. */
static enum windrow_status check_place(const char *store)
{
    char *ledger = windrow_path(store, "ledger"), *seal = windrow_path(store, "seal");
    enum windrow_status status = ledger && seal ? WINDROW_OK : memory();
    if (!status && windrow_file_exists(store) && !windrow_file_exists(ledger) && !windrow_file_exists(seal) && rmdir(store) && errno != ENOENT)
        status = windrow_fail(WINDROW_USAGE, "%s exists and is not a store; name another --out", store);
    free(ledger);
    free(seal);
    return status ? status : windrow_directory_make(store);
}

/* Merges keep a file of every run open. */
static void raise_file_limit(void)
{
    struct rlimit limit;
    if (getrlimit(RLIMIT_NOFILE, &limit) == 0 && limit.rlim_cur < limit.rlim_max) {
        limit.rlim_cur = limit.rlim_max;
        setrlimit(RLIMIT_NOFILE, &limit);
    }
}

static enum windrow_status shard(const struct windrow_shard_options *options, bool *already_done)
{
    bool fresh = !windrow_file_exists(options->out);
    enum windrow_status status = check_place(options->out);
    if (status)
        return status;
    raise_file_limit();
    struct job job = {.options = options, .store = options->out, .lock = -1,
                      .memory_bytes = (options->memory_bytes - MEMORY_OWN) / 20 * 19};
    windrow_meter_start(&job.meter, &options->watch);
    bool complete = false;
    if ((status = open_job(&job)))
        goto out;
    if ((status = windrow_job_finished(job.ledger, &complete)))
        goto out;
    if (complete) {
        if (already_done)
            *already_done = true;
        goto out;
    }
    if ((status = windrow_crew_create(options->threads, &job.crew)))
        goto out;
    status = work(&job);
    if (!status)
        status = windrow_directory_remove(job.scratch);
out:;
    /* Too many malformed fields: nothing of this store is worth keeping. Nor is there if a first call went wrong before
     * anything was read, as with a misspelt name: it should not stand in the way of the next one. */
    bool hopeless = (status == WINDROW_INPUT && job.reading.hopeless) ||
                    (fresh && (status == WINDROW_INPUT || status == WINDROW_USAGE) && !job.reading.run_count);
    if (hopeless || complete)
        windrow_directory_remove(job.scratch);
    close_job(&job);
    if (hopeless)
        windrow_directory_remove(options->out);
    return status;
}

enum windrow_status windrow_shard(const struct windrow_shard_options *options, bool *already_done)
{
    enum windrow_status status = check_options(options);
    if (already_done)
        *already_done = false;
    struct windrow_dump_paths paths = {0};
    if (status || (status = windrow_dump_paths_expand(options->dumps, options->dump_count, &paths)))
        return status;
    struct windrow_shard_options expanded = *options;
    expanded.dumps = (const char *const *)paths.paths;
    expanded.dump_count = paths.count;
    status = shard(&expanded, already_done);
    windrow_dump_paths_free(&paths);
    return status;
}
