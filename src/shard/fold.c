#include "shard/fold.h"

#include "shard/records.h"
#include "shard/sort.h"

#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <xxhash.h>

struct work {
    const struct windrow_fold *fold;
    const struct windrow_fold_pages *pages;
    uint32_t *places;
    size_t place_count, place_capacity;
};

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory while folding a batch; try a smaller --memory");
}

bool windrow_fold_needed(const struct windrow_fold *fold)
{
    return fold && (fold->with_names || (fold->with_aliases && fold->aliases.count) || fold->drop);
}

/* ---- The job's files ---- */

static enum windrow_status file_fingerprint(const char *path, uint64_t *fingerprint)
{
    struct stat facts;
    uint64_t bytes, checksum;
    *fingerprint = XXH3_64bits(path, strlen(path));
    if (stat(path, &facts) != 0 || !S_ISREG(facts.st_mode))
        return WINDROW_OK; /* whoever reads it will say what is wrong with it */
    enum windrow_status status = windrow_file_checksum(path, &bytes, &checksum);
    *fingerprint = checksum;
    return status ? windrow_fail_within(WINDROW_INPUT, "reading %s", path) : WINDROW_OK;
}

enum windrow_status windrow_fold_open(const struct windrow_shard_options *options, const char *scratch, struct windrow_fold *fold,
                                      uint64_t *fingerprint)
{
    uint64_t parts[3] = {0};
    *fold = (struct windrow_fold){.scratch = scratch, .with_names = options->names, .with_aliases = options->aliases};
    enum windrow_status status = options->names ? file_fingerprint(options->names, &parts[0]) : WINDROW_OK;
    if (!status && options->aliases)
        status = file_fingerprint(options->aliases, &parts[1]);
    if (!status && options->drop)
        status = windrow_drop_load(options->drop, &fold->drop);
    parts[2] = windrow_drop_fingerprint(fold->drop);
    *fingerprint = XXH3_64bits(parts, sizeof parts);
    return status;
}

void windrow_fold_close(struct windrow_fold *fold)
{
    windrow_drop_free(fold->drop);
    *fold = (struct windrow_fold){0};
}

/* The table is durable; so is its name, before the ledger learns of it. */
static enum windrow_status note(const struct windrow_fold *fold, struct windrow_ledger *ledger, const char *key, const void *facts, size_t bytes)
{
    struct windrow_ledger_record record = {key, facts, bytes};
    enum windrow_status status = windrow_directory_sync(fold->scratch);
    return status ? status : windrow_ledger_commit(ledger, &record, 1);
}

enum windrow_status windrow_fold_prepare(struct windrow_fold *fold, const struct windrow_shard_options *options, struct windrow_ledger *ledger,
                                         uint64_t memory_bytes, struct windrow_meter *meter)
{
    enum windrow_status status = fold->with_names ? windrow_ledger_get(ledger, "names", &fold->names, sizeof fold->names) : WINDROW_OK;
    if (status == WINDROW_NO) {
        windrow_meter_stage(meter, "reading names", "lines", 0);
        status = windrow_names_build(options->names, fold->scratch, memory_bytes, meter, &fold->names);
        windrow_meter_stage_end(meter);
        if (!status)
            status = note(fold, ledger, "names", &fold->names, sizeof fold->names);
    }
    if (!status && fold->with_aliases)
        status = windrow_ledger_get(ledger, "aliases", &fold->aliases, sizeof fold->aliases);
    if (status == WINDROW_NO) {
        windrow_meter_stage(meter, "reading aliases", "lines", 0);
        status = windrow_alias_build(options->aliases, fold->scratch, memory_bytes, meter, &fold->aliases);
        windrow_meter_stage_end(meter);
        if (!status)
            status = note(fold, ledger, "aliases", &fold->aliases, sizeof fold->aliases);
    }
    return status;
}

/* ---- A batch ---- */

/* Pages that were added stand for themselves. */
static enum windrow_status cover(struct work *work)
{
    size_t count = work->pages->count(work->pages->batch);
    if (count >= WINDROW_FOLD_DROPPED(WINDROW_DROP_COUNT))
        return windrow_fail(WINDROW_RESOURCE, "a batch outgrew 2^32 pages; try a smaller --memory");
    if (count > work->place_capacity) {
        size_t capacity = count + count / 8 + 64;
        uint32_t *places = realloc(work->places, capacity * sizeof *places);
        if (!places)
            return memory();
        work->places = places;
        work->place_capacity = capacity;
    }
    while (work->place_count < count) {
        work->places[work->place_count] = (uint32_t)work->place_count;
        work->place_count++;
    }
    return WINDROW_OK;
}

static const uint8_t *page_key(const void *context, uint32_t page)
{
    uint32_t key_bytes;
    const struct windrow_fold_pages *pages = context;
    return pages->key(pages->batch, page, &key_bytes);
}

/* The pages (or the ids) that still stand for themselves, in order. */
static enum windrow_status sorted(const struct work *work, bool ids, struct windrow_sort_item **out, size_t *count)
{
    const struct windrow_fold_pages *pages = work->pages;
    struct windrow_sort_item *items = *out = malloc((work->place_count + 1) * sizeof *items);
    *count = 0;
    if (!items)
        return memory();
    for (size_t page = 0; page < work->place_count; page++) {
        uint32_t key_bytes;
        const uint8_t *key = pages->key(pages->batch, (uint32_t)page, &key_bytes);
        if (work->places[page] == page && windrow_names_is_id((const char *)key) == ids)
            items[(*count)++] = (struct windrow_sort_item){0, (uint32_t)page, key_bytes};
    }
    windrow_sort_keys(items, *count, page_key, pages);
    return WINDROW_OK;
}

/* Puts what the table says in the place of the pages; *missing in that of those that it lacks. */
static enum windrow_status join(struct work *work, char *table_path, bool ids)
{
    struct windrow_records_reader table = {.frames.descriptor = -1};
    struct windrow_sort_item *items = NULL;
    const struct windrow_fold_pages *pages = work->pages;
    size_t count = 0;
    bool found;
    enum windrow_status status = table_path ? sorted(work, ids, &items, &count) : memory();
    if (!status && count && !(status = windrow_records_reader_open(&table, table_path)))
        status = windrow_records_next(&table);
    for (size_t index = 0; !status && index < count; index++) {
        uint32_t page = items[index].reference, key_bytes, place;
        const uint8_t *key = pages->key(pages->batch, page, &key_bytes);
        if ((status = windrow_records_seek(&table, key, key_bytes, &found)))
            break;
        if (!found && ids)
            work->places[page] = WINDROW_FOLD_DROPPED(WINDROW_DROP_MALFORMED);
        if (!found)
            continue;
        if (!table.record.value_bytes) {
            work->places[page] = WINDROW_FOLD_DROPPED(WINDROW_DROP_SCHEME);
        } else if (windrow_drop_has(work->fold->drop, (const char *)table.record.value, table.record.value_bytes)) {
            work->places[page] = WINDROW_FOLD_DROPPED(WINDROW_DROP_TAKEDOWN);
        } else if (!(status = pages->add(pages->batch, table.record.value, table.record.value_bytes, &place))) {
            work->places[page] = place;
        }
    }
    windrow_records_reader_close(&table);
    free(items);
    free(table_path);
    return status ? status : cover(work);
}

enum windrow_status windrow_fold_run(const struct windrow_fold *fold, const struct windrow_fold_pages *pages, uint32_t **places)
{
    *places = NULL;
    struct work work = {.fold = fold, .pages = pages};
    enum windrow_status status = cover(&work);
    if (!status && fold->with_names)
        status = join(&work, windrow_names_path(fold->scratch), true);
    if (!status && fold->with_aliases && fold->aliases.count)
        status = join(&work, windrow_alias_path(fold->scratch), false);
    /* An id's page may have been folded itself. */
    for (size_t page = 0; !status && page < work.place_count; page++)
        if (!windrow_fold_is_dropped(work.places[page]))
            work.places[page] = work.places[work.places[page]];
    if (status)
        free(work.places);
    else
        *places = work.places;
    return status;
}
