#include "shard/census.h"

#include "base/file.h"
#include "shard/variants.h"
#include "url/keyer.h"

#include <math.h>
#include <pthread.h>
#include <stdlib.h>
#include <string.h>
#include <xxhash.h>

struct page {
    uint64_t group, identity, host;
    unsigned features;
};

struct worker {
    struct windrow_keyer *keyer;
    struct windrow_dump_chunk chunk;
    struct windrow_sample pages, hosts, links;
    struct windrow_buffer shared;
    struct windrow_buffer host;      /* of the last key: most are on the same one */
    uint64_t host_hash;
    struct windrow_buffer source;    /* text of the last source; pairs repeat it */
    bool source_usable;
    struct page source_page;
    uint64_t lines, fields;
};

struct counter {
    const struct windrow_census_options *options;
    struct worker *workers;
    pthread_mutex_t lock;            /* for what follows */
    struct windrow_writer trial;
    struct windrow_census *census;
    double place_fields, place_squares;
    unsigned shapes;                 /* seen: a bit each */
};

static enum windrow_status page_of(struct worker *worker, const char *text, size_t bytes, struct page *page, bool *usable)
{
    const char *key;
    size_t key_bytes;
    worker->fields++;
    enum windrow_url_verdict verdict = windrow_keyer_key(worker->keyer, text, bytes, &key, &key_bytes);
    if (verdict == WINDROW_URL_MEMORY)
        return windrow_fail(WINDROW_RESOURCE, "out of memory for an international host name");
    *usable = verdict == WINDROW_URL_OK;
    if (!*usable)
        return WINDROW_OK;
    enum windrow_status status;
    if (key_bytes > worker->shared.capacity_bytes) {
        worker->shared.bytes = 0;
        if ((status = windrow_buffer_reserve(&worker->shared, key_bytes)))
            return status;
    }
    size_t shared_bytes = windrow_variants_shared((const uint8_t *)key, key_bytes, worker->shared.data, &page->features);
    page->group = XXH3_64bits(worker->shared.data, shared_bytes);
    page->identity = XXH3_64bits(key, key_bytes);
    size_t host_bytes = worker->host.bytes;
    if (!host_bytes || host_bytes >= key_bytes || key[host_bytes] || memcmp(key, worker->host.data, host_bytes) != 0) {
        host_bytes = windrow_key_host_bytes(key, key_bytes);
        worker->host.bytes = 0;
        if ((status = windrow_buffer_append(&worker->host, key, host_bytes)))
            return status;
        worker->host_hash = XXH3_64bits(key, host_bytes);
    }
    page->host = worker->host_hash;
    return WINDROW_OK;
}

static void meet_page(struct worker *worker, const struct page *page, enum windrow_sample_aspect aspect, uint32_t place)
{
    struct windrow_sample_entry *entry = windrow_sample_meet(&worker->pages, page->group, page->identity);
    if (!entry)
        return;
    entry->note[0] = page->features;
    windrow_sample_mark(entry, WINDROW_SAMPLE_MET, place);
    if (aspect != WINDROW_SAMPLE_MET)
        windrow_sample_mark(entry, aspect, place);
}

static void meet_host(struct worker *worker, uint64_t host, uint32_t place)
{
    struct windrow_sample_entry *entry = windrow_sample_meet(&worker->hosts, host, host);
    if (entry)
        windrow_sample_mark(entry, WINDROW_SAMPLE_MET, place);
}

static void meet_link(struct worker *worker, const struct page *target, uint32_t place)
{
    uint64_t ends[2] = {worker->source_page.identity, target->identity}, link = XXH3_64bits(ends, sizeof ends);
    struct windrow_sample_entry *entry = windrow_sample_meet(&worker->links, link, link);
    if (!entry)
        return;
    entry->note[0] = target->group;
    entry->note[1] = target->identity;
    windrow_sample_mark(entry, WINDROW_SAMPLE_MET, place);
}

static enum windrow_status take_source(struct worker *worker, const struct windrow_dump_line *line, uint32_t place)
{
    if (worker->source.bytes && line->source_bytes == worker->source.bytes &&
        memcmp(line->source, worker->source.data, line->source_bytes) == 0) {
        worker->fields++;
        return WINDROW_OK;
    }
    worker->source.bytes = 0;
    enum windrow_status status = windrow_buffer_append(&worker->source, line->source, line->source_bytes);
    if (!status)
        status = page_of(worker, line->source, line->source_bytes, &worker->source_page, &worker->source_usable);
    if (!status && worker->source_usable) {
        meet_page(worker, &worker->source_page, WINDROW_SAMPLE_CRAWLED, place);
        meet_host(worker, worker->source_page.host, place);
    }
    return status;
}

/* Keeps and drops as reading.c does. */
static enum windrow_status take_line(const struct counter *counter, struct worker *worker, struct windrow_dump_line *line, uint32_t place)
{
    struct windrow_dump_target target;
    struct page page;
    bool usable, linking = false;
    worker->lines += !line->continued;
    if (line->malformed) {
        worker->fields++;
        return WINDROW_OK;
    }
    enum windrow_status status = take_source(worker, line, place);
    if (status || !worker->source_usable)
        return status;
    while (windrow_dump_line_target(line, &target)) {
        if ((status = page_of(worker, target.text, target.bytes, &page, &usable)))
            return status;
        if (!usable || (target.nofollow && !counter->options->keep_nofollow) || page.identity == worker->source_page.identity)
            continue;
        linking = true;
        meet_page(worker, &page, WINDROW_SAMPLE_MET, place);
        meet_host(worker, page.host, place);
        meet_link(worker, &page, place);
    }
    if (linking)
        meet_page(worker, &worker->source_page, WINDROW_SAMPLE_LINKING, place);
    return WINDROW_OK;
}

/* Whether the chunk that was just read goes into the trial, so that this ends near its length with chunks from everywhere.
 * What has no known length is thinned: half of the room for the beginning, and an eighth of the other half for every doubling. */
static bool wanted_for_trial(const struct counter *counter)
{
    const struct windrow_census_options *options = counter->options;
    double room = (double)options->trial_bytes, taken = (double)counter->census->trial_bytes, read = (double)counter->census->bytes;
    if (windrow_places_basis(options->places) != WINDROW_PLAN_WHOLE)
        return true;
    double progress = windrow_places_progress(options->places);
    if (progress >= 0) /* the first chunk is always taken, and the reader is a little ahead */
        return taken <= room * progress;
    return read <= room / 2 || (taken < room && taken <= room / 2 * (1 + log2(read / (room / 2)) / 8));
}

static enum windrow_status next_chunk(struct counter *counter, struct worker *worker, uint32_t *place)
{
    const struct windrow_census_options *options = counter->options;
    struct windrow_census *census = counter->census;
    struct windrow_dump_chunk *chunk = &worker->chunk;
    pthread_mutex_lock(&counter->lock);
    enum windrow_status status = windrow_places_read(options->places, chunk, place);
    if (!status && windrow_meter_stopping(options->meter))
        status = windrow_fail(WINDROW_STOPPED, "stopped while planning; run the same command again");
    if (!status && chunk->bytes) {
        census->bytes += chunk->bytes;
        if (wanted_for_trial(counter)) {
            counter->shapes |= 1u << chunk->shape;
            status = windrow_writer_append(&counter->trial, chunk->text, chunk->bytes);
            if (!status && chunk->text[chunk->bytes - 1] != '\n')
                status = windrow_writer_append(&counter->trial, "\n", 1);
            census->trial_bytes += chunk->bytes;
        }
        double progress = windrow_places_progress(options->places), elapsed = windrow_seconds() - options->meter->stage_began;
        if (progress > 0)
            windrow_meter_left(options->meter, elapsed * fmax(1 - progress, 0) / progress);
    }
    pthread_mutex_unlock(&counter->lock);
    return status;
}

static enum windrow_status count_chunks(void *context, uint64_t task, unsigned crew_worker)
{
    (void)crew_worker;
    struct counter *counter = context;
    struct worker *worker = &counter->workers[task];
    for (;;) {
        uint32_t place;
        struct windrow_dump_lines lines;
        struct windrow_dump_line line;
        uint64_t fields = worker->fields;
        enum windrow_status status = next_chunk(counter, worker, &place);
        if (status || !worker->chunk.bytes)
            return status;
        worker->source.bytes = 0; /* the place is another one: its source is met again */
        windrow_dump_lines_begin(&lines, &worker->chunk);
        while (windrow_dump_lines_next(&lines, &line))
            if ((status = take_line(counter, worker, &line, place)))
                return status;
        double read = (double)(worker->fields - fields);
        windrow_meter_add(counter->options->meter, worker->fields - fields);
        pthread_mutex_lock(&counter->lock);
        counter->place_fields += read;
        counter->place_squares += read * read;
        pthread_mutex_unlock(&counter->lock);
    }
}

/* Pages and links want the most of the memory, a host has many of them. */
static enum windrow_status create_worker(struct worker *worker, uint64_t memory_bytes)
{
    uint64_t entry_bytes = windrow_sample_bytes(UINT32_C(1) << 16) >> 16, entries = memory_bytes / entry_bytes * 2 / 5;
    uint32_t most = entries > UINT32_C(1) << 20 ? UINT32_C(1) << 20 : (uint32_t)entries, rounded = 1 << 10;
    while (rounded * 2 <= most)
        rounded *= 2;
    enum windrow_status status = windrow_keyer_create(&worker->keyer);
    if (!status)
        status = windrow_sample_create(&worker->pages, rounded);
    if (!status)
        status = windrow_sample_create(&worker->links, rounded);
    return status ? status : windrow_sample_create(&worker->hosts, rounded / 2);
}

static void finish_census(struct counter *counter, unsigned workers)
{
    struct windrow_census *census = counter->census;
    double places = (double)census->places;
    for (unsigned index = 0; index < workers; index++) {
        struct worker *worker = &counter->workers[index];
        census->lines += worker->lines;
        census->fields += worker->fields;
        if (!index) {
            census->pages = worker->pages;
            census->hosts = worker->hosts;
            census->links = worker->links;
            worker->pages = worker->hosts = worker->links = (struct windrow_sample){0};
            continue;
        }
        windrow_sample_join(&census->pages, &worker->pages);
        windrow_sample_join(&census->hosts, &worker->hosts);
        windrow_sample_join(&census->links, &worker->links);
    }
    if (places > 1 && counter->place_fields > 0) {
        double mean = counter->place_fields / places, variance = fmax(counter->place_squares / places - mean * mean, 0);
        census->unevenness = sqrt(variance / (places - 1)) / mean;
    }
    census->trial_shape = counter->shapes == 1u << WINDROW_DUMP_PAIRS   ? WINDROW_SHAPE_PAIRS
                          : counter->shapes == 1u << WINDROW_DUMP_LISTS ? WINDROW_SHAPE_LISTS
                                                                        : WINDROW_SHAPE_AUTO;
}

enum windrow_status windrow_census_take(const struct windrow_census_options *options, struct windrow_census *census)
{
    unsigned workers = windrow_crew_workers(options->crew);
    struct counter counter = {.options = options, .census = census, .trial.descriptor = -1};
    *census = (struct windrow_census){0};
    pthread_mutex_init(&counter.lock, NULL);
    counter.workers = calloc(workers, sizeof *counter.workers);
    enum windrow_status status = counter.workers ? windrow_writer_open(&counter.trial, options->trial_path, false)
                                                 : windrow_fail(WINDROW_RESOURCE, "out of memory for counting");
    for (unsigned index = 0; !status && index < workers; index++)
        status = create_worker(&counter.workers[index], options->memory_bytes / workers);
    if (!status)
        status = windrow_crew_run(options->crew, workers, count_chunks, &counter);
    if (!status)
        status = windrow_writer_close(&counter.trial);
    windrow_writer_abandon(&counter.trial);
    census->places = windrow_places_count(options->places);
    if (!status)
        finish_census(&counter, workers);
    for (unsigned index = 0; counter.workers && index < workers; index++) {
        struct worker *worker = &counter.workers[index];
        windrow_keyer_destroy(worker->keyer);
        windrow_dump_chunk_free(&worker->chunk);
        windrow_sample_free(&worker->pages);
        windrow_sample_free(&worker->hosts);
        windrow_sample_free(&worker->links);
        windrow_buffer_free(&worker->shared);
        windrow_buffer_free(&worker->host);
        windrow_buffer_free(&worker->source);
    }
    free(counter.workers);
    pthread_mutex_destroy(&counter.lock);
    return status;
}

void windrow_census_free(struct windrow_census *census)
{
    windrow_sample_free(&census->pages);
    windrow_sample_free(&census->hosts);
    windrow_sample_free(&census->links);
}
