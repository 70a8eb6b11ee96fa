#include "shard/alias.h"

#include "base/varint.h"
#include "dump/reader.h"
#include "shard/keyrun.h"
#include "shard/sorter.h"
#include "store/layout.h"
#include "store/pages.h"
#include "url/keyer.h"

#include <stdlib.h>
#include <string.h>

/* While chains are followed, the table's records say of a key how far that has come:
 *
 *   open       value: 1, varint length of the jump, jump, smallest key from the key itself up to before the jump
 *   closed     value: 0, what it stands for
 *
 * and an update may also say that a key stands for itself after all, being the smallest of a cycle: it leaves the table. */
enum kind { CLOSED, OPEN, OWN };

struct span {
    const uint8_t *data;
    size_t bytes;
};

struct state {
    enum kind kind;
    struct span jump;       /* closed: what it stands for */
    struct span smallest;
};

struct build {
    const char *scratch;
    uint64_t sorter_bytes;
    struct windrow_meter *meter;
    struct windrow_alias_facts *facts;
    struct windrow_sorter *by_jump;  /* jump -> varint length of the key, key, smallest */
    uint64_t open_count;
    unsigned table;                  /* number of the newest table */
    struct windrow_buffer value;
};

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory for the aliases; try a smaller --memory");
}

char *windrow_alias_path(const char *scratch)
{
    return windrow_path(scratch, "aliases");
}

static char *table_path(const struct build *build, unsigned table)
{
    return windrow_path(build->scratch, "aliases-%02u", table);
}

static int span_order(struct span a, struct span b)
{
    return windrow_keyrun_compare(a.data, a.bytes, b.data, b.bytes);
}

static struct span span_smaller(struct span a, struct span b)
{
    return span_order(a, b) <= 0 ? a : b;
}

/* Two spans in one value: the first with its length in front. */
static enum windrow_status join(struct windrow_buffer *value, struct span a, struct span b)
{
    uint8_t length[WINDROW_VARINT_BYTES_MAX];
    enum windrow_status status = windrow_buffer_append(value, length, (size_t)(windrow_varint_put(length, a.bytes) - length));
    if (!status)
        status = windrow_buffer_append(value, a.data, a.bytes);
    return status ? status : windrow_buffer_append(value, b.data, b.bytes);
}

static bool split(struct span value, struct span *a, struct span *b)
{
    uint64_t bytes;
    const uint8_t *end = value.data + value.bytes, *at = windrow_varint_get(value.data, end, &bytes);
    if (!at || bytes > (uint64_t)(end - at))
        return false;
    *a = (struct span){at, (size_t)bytes};
    *b = (struct span){at + bytes, (size_t)((uint64_t)(end - at) - bytes)};
    return true;
}

static enum windrow_status damaged(const struct build *build)
{
    return windrow_fail(WINDROW_DAMAGED, "a scratch file of aliases in %s is damaged; remove the unfinished store and shard again", build->scratch);
}

static bool state_read(const struct windrow_record *record, struct state *state)
{
    if (!record->value_bytes)
        return false;
    state->kind = (enum kind)record->value[0];
    struct span rest = {record->value + 1, record->value_bytes - 1};
    state->jump = rest;
    return state->kind != OPEN || split(rest, &state->jump, &state->smallest);
}

static enum windrow_status state_write(struct windrow_buffer *value, const struct state *state)
{
    uint8_t kind = (uint8_t)state->kind;
    value->bytes = 0;
    enum windrow_status status = windrow_buffer_append(value, &kind, 1);
    if (status)
        return status;
    if (state->kind == OPEN)
        return join(value, state->jump, state->smallest);
    return state->kind == CLOSED ? windrow_buffer_append(value, state->jump.data, state->jump.bytes) : WINDROW_OK;
}

/* Writes a key's state into a table, and sends open ones to the next round. */
static enum windrow_status put_state(struct build *build, struct windrow_records_writer *out, struct span key, const struct state *state)
{
    enum windrow_status status = state_write(&build->value, state);
    struct windrow_record record = {key.data, key.bytes, build->value.data, build->value.bytes};
    if (status || (status = windrow_records_put(out, &record)) || state->kind != OPEN)
        return status;
    build->open_count++;
    build->value.bytes = 0;
    if ((status = join(&build->value, key, state->smallest)))
        return status;
    record = (struct windrow_record){state->jump.data, state->jump.bytes, build->value.data, build->value.bytes};
    return windrow_sorter_put(build->by_jump, &record);
}

static enum windrow_status begin_round(struct build *build)
{
    char name[32];
    snprintf(name, sizeof name, "aliases-jump-%02u", build->table);
    build->open_count = 0;
    return windrow_sorter_create(build->scratch, name, build->sorter_bytes, &build->by_jump);
}

/* ---- Reading the file ---- */

static enum windrow_status take_line(struct windrow_sorter *sorter, struct windrow_keyer *keyer, struct windrow_dump_line *line,
                                     struct windrow_buffer *from, uint64_t *bad_lines)
{
    enum windrow_status status;
    struct windrow_dump_target target;
    const char *key;
    size_t key_bytes;
    enum windrow_url_verdict verdict = windrow_keyer_key(keyer, line->source, line->source_bytes, &key, &key_bytes);
    from->bytes = 0;
    if (verdict == WINDROW_URL_OK && windrow_dump_line_target(line, &target)) {
        if ((status = windrow_buffer_append(from, key, key_bytes)))
            return status;
        verdict = windrow_keyer_key(keyer, target.text, target.bytes, &key, &key_bytes);
    } else if (verdict == WINDROW_URL_OK) {
        verdict = WINDROW_URL_MALFORMED;
    }
    if (verdict == WINDROW_URL_MEMORY)
        return memory();
    if (verdict != WINDROW_URL_OK) {
        ++*bad_lines;
        return WINDROW_OK;
    }
    if (from->bytes == key_bytes && memcmp(from->data, key, key_bytes) == 0)
        return WINDROW_OK;
    struct windrow_record record = {from->data, from->bytes, (const uint8_t *)key, key_bytes};
    return windrow_sorter_put(sorter, &record);
}

static enum windrow_status stopping(const struct build *build)
{
    if (build->meter && windrow_meter_stopping(build->meter))
        return windrow_fail(WINDROW_STOPPED, "stopped while reading the aliases; run the same command again to go on");
    return WINDROW_OK;
}

static enum windrow_status read_file(struct build *build, const char *file, struct windrow_sorter *sorter)
{
    struct windrow_dump *dump = NULL;
    struct windrow_dump_chunk chunk = {0};
    struct windrow_keyer *keyer = NULL;
    struct windrow_buffer from = {0};
    const char *const paths[] = {file};
    struct windrow_dump_options options = {.paths = paths, .path_count = 1, .shape = WINDROW_DUMP_LISTS};
    enum windrow_status status;
    if ((status = windrow_keyer_create(&keyer)) || (status = windrow_dump_open(&options, NULL, &dump)))
        goto out;
    while (!(status = stopping(build)) && !(status = windrow_dump_read(dump, &chunk)) && chunk.bytes) {
        struct windrow_dump_lines lines;
        struct windrow_dump_line line;
        uint64_t count = 0;
        windrow_dump_lines_begin(&lines, &chunk);
        for (; windrow_dump_lines_next(&lines, &line); count++)
            if (!line.continued && (status = take_line(sorter, keyer, &line, &from, &build->facts->bad_lines)))
                goto out;
        if (build->meter)
            windrow_meter_add(build->meter, count);
    }
out:
    windrow_dump_chunk_free(&chunk);
    windrow_dump_close(dump);
    windrow_keyer_destroy(keyer);
    windrow_buffer_free(&from);
    return status;
}

/* Makes the first table: every FROM with its smallest TO as its jump. */
static enum windrow_status first_table(struct build *build, const char *file)
{
    struct windrow_sorter *sorter = NULL;
    struct windrow_records_writer out = {.frames.writer.descriptor = -1};
    struct windrow_buffer before = {0};
    struct windrow_record record;
    bool ended = false;
    char *path = table_path(build, 0);
    enum windrow_status status = path ? windrow_sorter_create(build->scratch, "aliases-from", build->sorter_bytes, &sorter) : memory();
    if (!status)
        status = read_file(build, file, sorter);
    if (!status)
        status = begin_round(build);
    if (!status)
        status = windrow_records_writer_open(&out, path);
    while (!status && !(status = windrow_sorter_next(sorter, &record, &ended)) && !ended) {
        if (out.count && windrow_keyrun_compare(before.data, before.bytes, record.key, record.key_bytes) == 0)
            continue;
        struct span key = {record.key, record.key_bytes};
        struct state state = {OPEN, {record.value, record.value_bytes}, key};
        before.bytes = 0;
        if (!(status = windrow_buffer_append(&before, record.key, record.key_bytes)))
            status = put_state(build, &out, key, &state);
    }
    if (!status)
        status = windrow_records_writer_finish(&out, false);
    windrow_records_writer_abandon(&out);
    windrow_sorter_destroy(sorter);
    windrow_buffer_free(&before);
    free(path);
    return status;
}

/* ---- Following chains ---- */

/* What a key comes to, given where its jump stands. */
static struct state advance(struct build *build, struct span key, struct span jump, struct span smallest, const struct state *there, bool last)
{
    if (!there)
        return (struct state){.kind = CLOSED, .jump = jump};
    if (there->kind == CLOSED)
        return (struct state){.kind = CLOSED, .jump = there->jump};
    struct span both = span_smaller(smallest, there->smallest);
    bool around = span_order(there->jump, key) == 0;
    if (!last && !around)
        return (struct state){OPEN, there->jump, both};
    /* After so many steps as there are open keys, the jump lies on the cycle and its own steps went all around it. */
    struct span end = around ? both : there->smallest;
    if (span_order(end, key) != 0)
        return (struct state){.kind = CLOSED, .jump = end};
    build->facts->cycles++;
    return (struct state){.kind = OWN};
}

/* Looks up all jumps in the newest table; updates: key -> state. In the first round most jumps are no FROM: then nothing is sent, which
 * means closed. */
static enum windrow_status look_up_jumps(struct build *build, bool last, struct windrow_sorter *updates)
{
    struct windrow_records_reader table = {.frames.descriptor = -1};
    struct windrow_record record;
    bool ended = false, found;
    char *path = table_path(build, build->table);
    enum windrow_status status = path ? windrow_records_reader_open(&table, path) : memory();
    if (!status)
        status = windrow_records_next(&table);
    while (!status && !(status = windrow_sorter_next(build->by_jump, &record, &ended)) && !ended) {
        struct span key, smallest, jump = {record.key, record.key_bytes};
        struct state there;
        if ((status = windrow_records_seek(&table, record.key, record.key_bytes, &found)))
            break;
        if (!found && !build->table)
            continue;
        if (!split((struct span){record.value, record.value_bytes}, &key, &smallest) || (found && !state_read(&table.record, &there))) {
            status = damaged(build);
            break;
        }
        struct state state = advance(build, key, jump, smallest, found ? &there : NULL, last);
        if ((status = state_write(&build->value, &state)))
            break;
        struct windrow_record update = {key.data, key.bytes, build->value.data, build->value.bytes};
        status = windrow_sorter_put(updates, &update);
    }
    windrow_records_reader_close(&table);
    free(path);
    return status;
}

/* Writes the next table: the newest one with the updates. */
static enum windrow_status update_table(struct build *build, struct windrow_sorter *updates)
{
    struct windrow_records_reader table = {.frames.descriptor = -1};
    struct windrow_records_writer out = {.frames.writer.descriptor = -1};
    struct windrow_record update = {0};
    bool ended = false;
    char *old_path = table_path(build, build->table), *new_path = table_path(build, build->table + 1);
    enum windrow_status status = old_path && new_path ? windrow_records_reader_open(&table, old_path) : memory();
    if (!status)
        status = windrow_records_writer_open(&out, new_path);
    if (!status)
        status = windrow_sorter_next(updates, &update, &ended);
    while (!status && !(status = windrow_records_next(&table)) && !table.ended) {
        struct span key = {table.record.key, table.record.key_bytes};
        struct state state;
        bool known = state_read(&table.record, &state);
        bool updated = !ended && span_order(key, (struct span){update.key, update.key_bytes}) == 0;
        if (!updated)
            state.kind = CLOSED;
        else
            known = known && state_read(&update, &state);
        if (!known)
            status = damaged(build);
        else if (state.kind != OWN)
            status = put_state(build, &out, key, &state);
        if (!status && updated)
            status = windrow_sorter_next(updates, &update, &ended);
    }
    if (!status)
        status = windrow_records_writer_finish(&out, false);
    windrow_records_writer_abandon(&out);
    windrow_records_reader_close(&table);
    if (!status)
        status = windrow_file_remove(old_path);
    free(old_path);
    free(new_path);
    return status;
}

static enum windrow_status double_jumps(struct build *build, bool last)
{
    struct windrow_sorter *updates = NULL;
    enum windrow_status status = stopping(build);
    if (!status)
        status = windrow_sorter_create(build->scratch, "aliases-update", build->sorter_bytes, &updates);
    if (!status)
        status = look_up_jumps(build, last, updates);
    windrow_sorter_destroy(build->by_jump);
    build->by_jump = NULL;
    if (!status)
        status = begin_round(build);
    if (!status)
        status = update_table(build, updates);
    build->table++;
    windrow_sorter_destroy(updates);
    return status;
}

/* Writes the finished table: what every key stands for, and no more. */
static enum windrow_status last_table(struct build *build)
{
    struct windrow_records_reader table = {.frames.descriptor = -1};
    struct windrow_records_writer out = {.frames.writer.descriptor = -1};
    char *old_path = table_path(build, build->table), *path = windrow_alias_path(build->scratch);
    enum windrow_status status = old_path && path ? windrow_records_reader_open(&table, old_path) : memory();
    if (!status)
        status = windrow_records_writer_open(&out, path);
    while (!status && !(status = windrow_records_next(&table)) && !table.ended) {
        struct state state;
        if (!state_read(&table.record, &state) || state.kind != CLOSED) {
            status = damaged(build);
            break;
        }
        struct windrow_record record = {table.record.key, table.record.key_bytes, state.jump.data, state.jump.bytes};
        build->facts->count++;
        build->facts->to_bytes += state.jump.bytes;
        status = windrow_records_put(&out, &record);
    }
    if (!status)
        status = windrow_records_writer_finish(&out, true);
    windrow_records_writer_abandon(&out);
    windrow_records_reader_close(&table);
    if (!status)
        status = windrow_file_remove(old_path);
    free(old_path);
    free(path);
    return status;
}

enum windrow_status windrow_alias_build(const char *file, const char *scratch, uint64_t memory_bytes, struct windrow_meter *meter,
                                        struct windrow_alias_facts *facts)
{
    *facts = (struct windrow_alias_facts){0};
    struct build build = {.scratch = scratch, .sorter_bytes = memory_bytes / 2, .meter = meter, .facts = facts};
    enum windrow_status status = first_table(&build, file);
    /* The first round also closes the keys whose TO is no FROM. */
    uint64_t steps = 1, open = UINT64_MAX;
    for (; !status && open > steps; steps *= 2) {
        status = double_jumps(&build, false);
        open = build.open_count;
    }
    if (!status && open)
        status = double_jumps(&build, true);
    if (!status)
        status = last_table(&build);
    windrow_sorter_destroy(build.by_jump);
    windrow_buffer_free(&build.value);
    return status ? windrow_fail_within(status, "reading the aliases") : WINDROW_OK;
}

/* ---- The store's table ---- */

/* Sorts the table by TO, so that the page table is read front to back, and what was found back by FROM. */
static enum windrow_status find_pages(const char *scratch, struct windrow_page_reader *pages, uint64_t sorter_bytes, struct windrow_sorter *by_from)
{
    struct windrow_records_reader table = {.frames.descriptor = -1};
    struct windrow_sorter *by_to = NULL;
    struct windrow_record record;
    bool ended = false;
    char *path = windrow_alias_path(scratch);
    enum windrow_status status = path ? windrow_records_reader_open(&table, path) : memory();
    if (!status)
        status = windrow_sorter_create(scratch, "aliases-to", sorter_bytes, &by_to);
    while (!status && !(status = windrow_records_next(&table)) && !table.ended) {
        struct windrow_record turned = {table.record.value, table.record.value_bytes, table.record.key, table.record.key_bytes};
        status = windrow_sorter_put(by_to, &turned);
    }
    while (!status && !(status = windrow_sorter_next(by_to, &record, &ended)) && !ended) {
        uint64_t page;
        status = windrow_page_reader_find_key(pages, (const char *)record.key, record.key_bytes, &page);
        if (status == WINDROW_NO) {
            status = WINDROW_OK; /* what it stands for is not in the crawl */
            continue;
        }
        struct windrow_record found = {record.value, record.value_bytes, (const uint8_t *)&page, sizeof page};
        if (!status)
            status = windrow_sorter_put(by_from, &found);
    }
    windrow_sorter_destroy(by_to);
    windrow_records_reader_close(&table);
    free(path);
    return status;
}

static enum windrow_status write_flat(const char *store_path, const char *name, const struct windrow_buffer *content)
{
    struct windrow_writer flat = {.descriptor = -1};
    char *path = windrow_path(store_path, "%s", name);
    enum windrow_status status = path ? windrow_writer_open(&flat, path, false) : memory();
    if (!status)
        status = windrow_writer_append(&flat, content->data, content->bytes);
    if (!status)
        status = windrow_writer_finish(&flat, NULL);
    windrow_writer_abandon(&flat);
    free(path);
    return status;
}

enum windrow_status windrow_alias_write(const char *scratch, const struct windrow_store *store, const char *store_path, uint64_t memory_bytes)
{
    struct windrow_page_reader *pages = NULL;
    struct windrow_pages_writer table = {.file.descriptor = -1};
    struct windrow_sorter *by_from = NULL;
    struct windrow_buffer before = {0};
    struct windrow_record record;
    bool ended = false;
    uint64_t bytes, checksum;
    char *path = windrow_path(store_path, "aliases.zst");
    enum windrow_status status = path ? windrow_page_reader_create(store, &pages) : memory();
    if (!status)
        status = windrow_sorter_create(scratch, "aliases-page", memory_bytes / 2, &by_from);
    if (!status)
        status = find_pages(scratch, pages, memory_bytes / 2, by_from);
    if (!status)
        status = windrow_pages_writer_open(&table, path, 0, true);
    while (!status && !(status = windrow_sorter_next(by_from, &record, &ended)) && !ended) {
        uint64_t page;
        memcpy(&page, record.value, sizeof page);
        size_t shared = windrow_keyrun_shared(before.data, before.bytes, record.key, record.key_bytes, 0);
        status = windrow_pages_put(&table, record.key, record.key_bytes, shared, page);
        before.bytes = 0;
        if (!status)
            status = windrow_buffer_append(&before, record.key, record.key_bytes);
    }
    if (!status)
        status = windrow_pages_writer_finish(&table, &bytes, &checksum);
    struct windrow_pages_mark last = {table.next_entry, 0, table.first_keys.bytes};
    if (!status)
        status = windrow_buffer_append(&table.marks, &last, sizeof last);
    if (!status)
        status = write_flat(store_path, "alias-index", &table.marks);
    if (!status)
        status = write_flat(store_path, "alias-keys", &table.first_keys);
    windrow_pages_writer_free(&table);
    windrow_sorter_destroy(by_from);
    windrow_buffer_free(&before);
    windrow_page_reader_destroy(pages);
    free(path);
    return status;
}
