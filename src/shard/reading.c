#include "shard/reading.h"

#include "shard/batch.h"
#include "shard/linkmerge.h"
#include "url/keyer.h"

#include <pthread.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#define SAMPLES_MOST 1000          /* malformed lines kept for the log, of the whole job */
#define SAMPLE_TEXT_BYTES 200
#define BAD_FIELDS_LEAST 100000    /* fields before the share of malformed ones means anything */
#define BATCH_SECONDS_MOST 300.0   /* a slow stream is written down this often all the same */

struct reader;

struct worker {
    struct windrow_batch *batch;
    struct windrow_keyer *keyer;
    struct windrow_dump_chunk chunk;
    struct windrow_buffer samples, source;
    char id[WINDROW_NAMES_KEY_BYTES];
    uint64_t sample_count;
    uint64_t lines, fields, bad_fields;
    uint64_t dropped[WINDROW_DROP_COUNT];
    bool writes;                 /* its batch is to be written, as run number `run` */
    uint64_t run;
    struct windrow_batch_counts written;
    struct reader *reader;
};

struct reader {
    const struct windrow_reading *reading;
    struct windrow_reading_state *state;
    struct windrow_dump *dump;
    pthread_mutex_t lock;          /* for what follows */
    struct windrow_dump_position position;
    bool ended;
    bool write_now;
    double batch_began;
    char first_sample[256];        /* the first malformed line of this process, as the log has it */
    double began, seconds_before;  /* of reading; by earlier processes */
    uint64_t fields, bad_fields;   /* of the whole job, for the share */
    struct worker *workers;
};

/* Notes a malformed line or field for the log: file, line, reason, the beginning of the text with control bytes escaped. */
static enum windrow_status sample(struct reader *reader, struct worker *worker, uint64_t line, uint64_t file, const char *text, size_t bytes,
                                  const char *reason)
{
    if (reader->state->samples + worker->sample_count >= SAMPLES_MOST)
        return WINDROW_OK;
    worker->sample_count++;
    char place[512];
    int length = snprintf(place, sizeof place, "%s\t%llu\t%s\t", windrow_dump_file_name(reader->dump, file), (unsigned long long)line,
                          reason);
    enum windrow_status status = windrow_buffer_append(&worker->samples, place, (size_t)length < sizeof place ? (size_t)length : sizeof place - 1);
    for (size_t at = 0; !status && at < bytes && at < SAMPLE_TEXT_BYTES; at++) {
        char escaped[5];
        unsigned char byte = (unsigned char)text[at];
        if (byte < 0x20 || byte >= 0x7f || byte == '\\')
            snprintf(escaped, sizeof escaped, "\\x%02x", byte);
        else
            snprintf(escaped, sizeof escaped, "%c", byte);
        status = windrow_buffer_append(&worker->samples, escaped, strlen(escaped));
    }
    if (!status)
        status = windrow_buffer_append(&worker->samples, "\n", 1);
    pthread_mutex_lock(&reader->lock);
    if (!status && !reader->first_sample[0]) {
        size_t begin = worker->samples.bytes - 1;
        while (begin && worker->samples.data[begin - 1] != '\n')
            begin--;
        size_t line_bytes = worker->samples.bytes - 1 - begin;
        if (line_bytes >= sizeof reader->first_sample)
            line_bytes = sizeof reader->first_sample - 1;
        memcpy(reader->first_sample, worker->samples.data + begin, line_bytes);
        for (size_t byte = 0; byte < line_bytes; byte++)
            if (reader->first_sample[byte] == '\t')
                reader->first_sample[byte] = ' ';
    }
    pthread_mutex_unlock(&reader->lock);
    return status;
}

/* The key of a number in a dump of ids. */
static bool id_key(struct worker *worker, const char *text, size_t bytes, const char **key, size_t *key_bytes)
{
    uint64_t id;
    if (!windrow_names_number(text, bytes, &id))
        return false;
    windrow_names_key(id, worker->id);
    *key = worker->id;
    *key_bytes = sizeof worker->id;
    return true;
}

/* The key of a field; counts the field. *key is NULL when it has none, and *reason says why. */
static enum windrow_status field_key(struct reader *reader, struct worker *worker, const struct windrow_dump_line *line, const char *text, size_t bytes,
                                     const char **key, size_t *key_bytes, enum windrow_drop *reason)
{
    worker->fields++;
    if (line->shape == WINDROW_DUMP_IDS) {
        if (id_key(worker, text, bytes, key, key_bytes))
            return WINDROW_OK;
        *key = NULL;
        *reason = WINDROW_DROP_MALFORMED;
        worker->bad_fields++;
        return sample(reader, worker, line->number, worker->chunk.file, text, bytes, "not a whole number below 2^64; is --shape ids right?");
    }
    switch (windrow_keyer_key(worker->keyer, text, bytes, key, key_bytes)) {
    case WINDROW_URL_OK:
        return WINDROW_OK;
    case WINDROW_URL_SCHEME:
        *key = NULL;
        *reason = WINDROW_DROP_SCHEME;
        return WINDROW_OK;
    case WINDROW_URL_MEMORY:
        return windrow_fail(WINDROW_RESOURCE, "out of memory for an international host name");
    default:
        *key = NULL;
        *reason = WINDROW_DROP_MALFORMED;
        worker->bad_fields++;
        return sample(reader, worker, line->number, worker->chunk.file, text, bytes, "not a usable URL");
    }
}

/* A line whose source is to be taken down: its links are counted for the first reason that fits, which is never `duplicate`,
 * and the page with its line is gone. */
static enum windrow_status take_dropped_line(struct reader *reader, struct worker *worker, struct windrow_dump_line *line, const char *source,
                                             size_t source_bytes)
{
    enum windrow_status status;
    struct windrow_dump_target target;
    const char *key;
    size_t key_bytes;
    enum windrow_drop reason = WINDROW_DROP_MALFORMED;
    worker->source.bytes = 0;
    if ((status = windrow_buffer_append(&worker->source, source, source_bytes)))
        return status;
    while (windrow_dump_line_target(line, &target)) {
        if ((status = field_key(reader, worker, line, target.text, target.bytes, &key, &key_bytes, &reason)))
            return status;
        if (key && target.nofollow && !reader->reading->options->keep_nofollow)
            reason = WINDROW_DROP_NOFOLLOW;
        else if (key && key_bytes == source_bytes && memcmp(key, worker->source.data, key_bytes) == 0)
            reason = WINDROW_DROP_SELF;
        else if (key)
            reason = WINDROW_DROP_TAKEDOWN;
        worker->dropped[reason]++;
    }
    return WINDROW_OK;
}

static enum windrow_status take_line(struct reader *reader, struct worker *worker, struct windrow_dump_line *line)
{
    enum windrow_status status;
    struct windrow_dump_target target;
    const char *key;
    size_t key_bytes;
    enum windrow_drop reason = WINDROW_DROP_MALFORMED;
    worker->lines += !line->continued;
    if (line->malformed) {
        worker->fields++;
        worker->bad_fields++;
        worker->dropped[WINDROW_DROP_MALFORMED]++;
        return sample(reader, worker, line->number, worker->chunk.file, line->text, line->text_bytes, line->malformed);
    }
    if (line->shape == WINDROW_DUMP_IDS)
        windrow_batch_place(worker->batch, worker->chunk.file, line->number);
    if ((status = field_key(reader, worker, line, line->source, line->source_bytes, &key, &key_bytes, &reason)))
        return status;
    if (!key) {
        /* All links of a page without a usable name are dropped for its sake; without links, the line itself counts. */
        uint64_t links = 0;
        while (windrow_dump_line_target(line, &target))
            links++;
        worker->dropped[reason] += links ? links : !line->continued;
        return WINDROW_OK;
    }
    bool ids = line->shape == WINDROW_DUMP_IDS;
    const struct windrow_drop_set *drop = reader->reading->fold->drop;
    if (drop && !ids && windrow_drop_has(drop, key, key_bytes))
        return take_dropped_line(reader, worker, line, key, key_bytes);
    if ((status = windrow_batch_source(worker->batch, key, key_bytes)))
        return status;
    while (windrow_dump_line_target(line, &target)) {
        if ((status = field_key(reader, worker, line, target.text, target.bytes, &key, &key_bytes, &reason)))
            return status;
        if (!key) {
            worker->dropped[reason]++;
            continue;
        }
        if (target.nofollow && !reader->reading->options->keep_nofollow) {
            worker->dropped[WINDROW_DROP_NOFOLLOW]++;
            continue;
        }
        if (drop && !ids && windrow_drop_has(drop, key, key_bytes)) {
            worker->dropped[WINDROW_DROP_TAKEDOWN]++;
            continue;
        }
        bool self;
        if ((status = windrow_batch_target(worker->batch, key, key_bytes, &self)))
            return status;
        worker->dropped[WINDROW_DROP_SELF] += self;
    }
    return windrow_batch_line_end(worker->batch);
}

static enum windrow_status check_share(const struct reader *reader)
{
    double most = reader->reading->options->bad_max;
    if ((double)reader->bad_fields <= most * (double)reader->fields)
        return WINDROW_OK;
    reader->state->hopeless = 1;
    return windrow_fail(WINDROW_INPUT, "%llu of %llu URL fields are malformed, more than --bad-max %g allows; is --shape right? The first: %s",
                        (unsigned long long)reader->bad_fields, (unsigned long long)reader->fields, most, reader->first_sample);
}

/* True when what was read last is not to be trusted: a Ctrl-C at a terminal stops the program at the other end of the pipe,
 * too, so that the stream ends early, perhaps within a line. What is left out here is read again by the job that goes on.
 * The other program may die a moment before we hear of the signal; so an end is looked at twice. */
static bool cut_short(const struct reader *reader, const struct windrow_dump_chunk *chunk)
{
    const struct windrow_shard_options *options = reader->reading->options;
    bool from_pipe = false;
    for (size_t dump = 0; dump < options->dump_count; dump++)
        from_pipe |= strcmp(options->dumps[dump], "-") == 0;
    if (!from_pipe)
        return false;
    if (!windrow_meter_stopping(reader->reading->meter) && (!chunk->bytes || chunk->text[chunk->bytes - 1] != '\n'))
        nanosleep(&(struct timespec){.tv_nsec = 50000000}, NULL);
    return windrow_meter_stopping(reader->reading->meter);
}

/* Takes the next chunk; *got is false when this worker should stop reading. */
static enum windrow_status next_chunk(struct reader *reader, struct worker *worker, bool *got)
{
    enum windrow_status status = WINDROW_OK;
    pthread_mutex_lock(&reader->lock);
    *got = false;
    if (windrow_meter_stopping(reader->reading->meter) || windrow_seconds() - reader->batch_began > BATCH_SECONDS_MOST)
        reader->write_now = true;
    if (!reader->ended && !reader->write_now) {
        status = windrow_dump_read(reader->dump, &worker->chunk);
        if (!status && cut_short(reader, &worker->chunk)) {
            reader->write_now = true;
        } else if (!status && worker->chunk.bytes) {
            *got = true;
            reader->position = worker->chunk.end;
        } else if (!status) {
            reader->ended = true;
        }
        uint64_t consumed, total;
        windrow_dump_progress(reader->dump, &consumed, &total);
        double elapsed = windrow_seconds() - reader->reading->meter->stage_began;
        if (total && consumed)
            windrow_meter_left(reader->reading->meter, elapsed * (double)(total - consumed) / (double)consumed);
    }
    pthread_mutex_unlock(&reader->lock);
    return status;
}

static enum windrow_status fill(void *context, uint64_t task, unsigned crew_worker)
{
    (void)crew_worker;
    struct reader *reader = context;
    struct worker *worker = &reader->workers[task];
    enum windrow_status status;
    for (;;) {
        bool got;
        if ((status = next_chunk(reader, worker, &got)) || !got)
            return status;
        struct windrow_dump_lines lines;
        struct windrow_dump_line line;
        uint64_t fields = worker->fields, bad_fields = worker->bad_fields, counted = fields;
        windrow_dump_lines_begin(&lines, &worker->chunk);
        while (windrow_dump_lines_next(&lines, &line))
            if ((status = take_line(reader, worker, &line)))
                return status;
        windrow_meter_add(reader->reading->meter, worker->fields - counted);
        pthread_mutex_lock(&reader->lock);
        reader->fields += worker->fields - fields;
        reader->bad_fields += worker->bad_fields - bad_fields;
        if (windrow_batch_full(worker->batch))
            reader->write_now = true;
        if (reader->fields >= BAD_FIELDS_LEAST)
            status = check_share(reader);
        pthread_mutex_unlock(&reader->lock);
        if (status)
            return status;
    }
}

static enum windrow_status sample_unnamed(void *context, uint64_t file, uint64_t line, uint64_t id)
{
    struct worker *worker = context;
    char text[32];
    int bytes = snprintf(text, sizeof text, "%llu", (unsigned long long)id);
    return sample(worker->reader, worker, line, file, text, (size_t)bytes, "id without a name");
}

/* Says which run a worker is to write. Before any is written: writing empties batches, in whatever order. */
static void number_run(struct reader *reader, unsigned index)
{
    struct worker *worker = &reader->workers[index];
    worker->run = index ? reader->workers[index - 1].run + reader->workers[index - 1].writes : reader->state->run_count;
    /* Dumps that come to nothing leave one empty batch: the merges have something to merge. */
    worker->writes = !windrow_batch_empty(worker->batch) || (index == 0 && reader->ended && worker->run == 0);
}

static enum windrow_status write(void *context, uint64_t task, unsigned crew_worker)
{
    (void)crew_worker;
    struct reader *reader = context;
    struct worker *worker = &reader->workers[task];
    worker->written = (struct windrow_batch_counts){0};
    if (!worker->writes)
        return WINDROW_OK;
    char *key_path = windrow_path(reader->reading->scratch, "batch-%06llu.keys", (unsigned long long)worker->run);
    char *link_path = windrow_path(reader->reading->scratch, "batch-%06llu.links", (unsigned long long)worker->run);
    enum windrow_status status = WINDROW_OK;
    if (!key_path || !link_path)
        status = windrow_fail(WINDROW_RESOURCE, "out of memory for a path");
    if (!status)
        status = windrow_batch_write(worker->batch, key_path, link_path, sample_unnamed, worker, &worker->written);
    free(key_path);
    free(link_path);
    return status;
}

/* Appends the samples to the log, which is a help for people and not part of the store. */
static enum windrow_status write_log(struct reader *reader, unsigned workers)
{
    FILE *log = NULL;
    for (unsigned index = 0; index < workers; index++) {
        struct worker *worker = &reader->workers[index];
        if (worker->sample_count && !log && !(log = fopen(reader->reading->log_path, "a")))
            return windrow_fail(WINDROW_RESOURCE, "cannot write %s", reader->reading->log_path);
        if (worker->sample_count)
            fwrite(worker->samples.data, 1, worker->samples.bytes, log);
        reader->state->samples += worker->sample_count;
        worker->sample_count = 0;
        worker->samples.bytes = 0;
    }
    if (log)
        fclose(log);
    return WINDROW_OK;
}

/* The batches are written; the ledger learns of them in one transaction. */
static enum windrow_status commit(struct reader *reader, unsigned workers)
{
    struct windrow_reading_state *state = reader->state;
    struct windrow_ledger_record *records = calloc(workers + 1, sizeof *records);
    char (*names)[32] = calloc(workers + 1, sizeof *names);
    enum windrow_status status = records && names ? WINDROW_OK : windrow_fail(WINDROW_RESOURCE, "out of memory for the ledger");
    size_t count = 0;
    if (!status)
        status = write_log(reader, workers);
    if (!status)
        status = windrow_directory_sync(reader->reading->scratch);
    for (unsigned index = 0; !status && index < workers; index++) {
        struct worker *worker = &reader->workers[index];
        state->lines += worker->lines;
        state->fields += worker->fields;
        state->bad_fields += worker->bad_fields + worker->written.bad_fields;
        for (int drop = 0; drop < WINDROW_DROP_COUNT; drop++)
            state->dropped[drop] += worker->dropped[drop] + worker->written.dropped[drop];
        state->dropped[WINDROW_DROP_DUPLICATE] += worker->written.duplicates;
        state->links += worker->written.links;
        worker->lines = worker->fields = worker->bad_fields = 0;
        memset(worker->dropped, 0, sizeof worker->dropped);
        if (!worker->writes)
            continue;
        state->run_pages += worker->written.pages;
        snprintf(names[count], sizeof *names, "run/%06llu", (unsigned long long)state->run_count++);
        records[count] = (struct windrow_ledger_record){names[count], &worker->written.pages, sizeof worker->written.pages};
        count++;
    }
    windrow_dump_progress(reader->dump, &state->consumed_bytes, &state->total_bytes);
    state->seconds = reader->seconds_before + windrow_seconds() - reader->began;
    state->position = reader->position;
    state->finished = reader->ended;
    /* The merges keep a frame of every run in memory: better to know now than when everything has been read. */
    uint64_t most = reader->reading->merge_memory_bytes;
    if (!status && most && windrow_linkmerge_memory_bytes(state->run_count) > most)
        status = windrow_fail(WINDROW_RESOURCE, "this memory holds too small a batch for dumps of this size: %llu batches so far, and merging them takes "
                                                "%llu MiB; run the same command again with a --memory of %llu MiB or more",
                              (unsigned long long)state->run_count, (unsigned long long)(windrow_linkmerge_memory_bytes(state->run_count) >> 20) + 1,
                              (unsigned long long)(most >> 19));
    if (!status) {
        records[count] = (struct windrow_ledger_record){"reading", state, sizeof *state};
        status = windrow_ledger_commit(reader->reading->ledger, records, count + 1);
    }
    free(records);
    free(names);
    return status;
}

static enum windrow_status read_all(struct reader *reader, unsigned workers)
{
    enum windrow_status status;
    for (;;) {
        reader->write_now = false;
        reader->batch_began = windrow_seconds();
        status = windrow_crew_run(reader->reading->crew, workers, fill, reader);
        if (status == WINDROW_INPUT)
            write_log(reader, workers); /* so that the samples that the message speaks of are there */
        if (status)
            break;
        for (unsigned index = 0; index < workers; index++)
            number_run(reader, index);
        if ((status = windrow_crew_run(reader->reading->crew, workers, write, reader)))
            break;
        for (unsigned index = 0; index < workers; index++)
            reader->bad_fields += reader->workers[index].written.bad_fields;
        if ((reader->ended || reader->fields >= BAD_FIELDS_LEAST) && (status = check_share(reader))) {
            write_log(reader, workers);
            break;
        }
        if ((status = commit(reader, workers)))
            break;
        if (reader->ended)
            break;
        if (windrow_meter_stopping(reader->reading->meter)) {
            status = windrow_fail(WINDROW_STOPPED, "stopped at a checkpoint; run the same command again to go on");
            break;
        }
    }
    return status;
}

enum windrow_status windrow_reading_run(const struct windrow_reading *reading, struct windrow_reading_state *state)
{
    unsigned workers = windrow_crew_workers(reading->crew);
    struct reader reader = {.reading = reading, .state = state, .fields = state->fields, .bad_fields = state->bad_fields,
                            .began = windrow_seconds(), .seconds_before = state->seconds};
    struct windrow_dump_options options = {.paths = reading->options->dumps, .path_count = reading->options->dump_count,
                                           .shape = (enum windrow_dump_shape)reading->options->shape,
                                           .with_ids = reading->fold->with_names};
    pthread_mutex_init(&reader.lock, NULL);
    reader.workers = calloc(workers, sizeof *reader.workers);
    enum windrow_status status = reader.workers ? WINDROW_OK : windrow_fail(WINDROW_RESOURCE, "out of memory for the batches");
    uint64_t batches_bytes = reading->memory_bytes - windrow_drop_memory_bytes(reading->fold->drop);
    if (!status && batches_bytes > reading->memory_bytes)
        status = windrow_fail(WINDROW_RESOURCE, "the URLs and hosts to drop alone take %llu MiB; name a larger --memory",
                              (unsigned long long)(windrow_drop_memory_bytes(reading->fold->drop) >> 20));
    bool begun = state->position.bytes || state->position.file;
    if (!status)
        status = windrow_dump_open(&options, begun ? &state->position : NULL, &reader.dump);
    reader.position = state->position;
    for (unsigned index = 0; !status && index < workers; index++) {
        reader.workers[index].reader = &reader;
        status = windrow_batch_create(batches_bytes / workers, reading->fold, &reader.workers[index].batch);
        if (!status)
            status = windrow_keyer_create(&reader.workers[index].keyer);
    }
    if (!status)
        status = read_all(&reader, workers);
    /* Names are for reading only; the ledger knows that it is through. */
    char *names_path = !status && state->finished ? windrow_names_path(reading->scratch) : NULL;
    if (names_path)
        status = windrow_file_remove(names_path);
    free(names_path);
    for (unsigned index = 0; reader.workers && index < workers; index++) {
        windrow_batch_destroy(reader.workers[index].batch);
        windrow_keyer_destroy(reader.workers[index].keyer);
        windrow_dump_chunk_free(&reader.workers[index].chunk);
        windrow_buffer_free(&reader.workers[index].samples);
        windrow_buffer_free(&reader.workers[index].source);
    }
    free(reader.workers);
    windrow_dump_close(reader.dump);
    pthread_mutex_destroy(&reader.lock);
    return status;
}
