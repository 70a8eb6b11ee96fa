#include "shard/table.h"

#include "shard/keyrun.h"
#include "shard/sealed.h"
#include "store/layout.h"
#include "store/pages.h"
#include "url/domain.h"
#include "url/key.h"

#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <string.h>

/* segment-N.table:
 *   struct table_head
 *   struct windrow_pages_mark …      mark_count, key_at from 0
 *   first keys                       first_key_bytes
 *   struct windrow_core_group …      group_count; ranks 0
 *   uint32_t …                       core_pages out-degrees
 */
struct table_head {
    uint64_t pages, core_pages, crawled_pages, key_bytes;
    uint64_t mark_count, first_key_bytes;
    uint64_t host_count, host_name_bytes;
    uint64_t group_count;
    uint64_t file_bytes, file_checksum;
};

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory for the page table");
}

/* Walks over the pages of all parts, from any page on. */
struct walk {
    const struct windrow_table_parts *parts;
    uint64_t part;
    struct windrow_keyrun_reader reader;
};

static enum windrow_status walk_open_part(struct walk *walk, uint64_t page)
{
    windrow_keyrun_reader_close(&walk->reader);
    char *path = windrow_path(walk->parts->scratch, "part-%06llu", (unsigned long long)walk->part);
    if (!path)
        return memory();
    struct windrow_keyrun_index index = {0};
    enum windrow_status status = windrow_keyrun_reader_open(&walk->reader, path);
    if (!status)
        status = windrow_keyrun_index_load(path, &index);
    if (!status && index.mark_count) {
        uint64_t entry = page - walk->parts->page_bases[walk->part];
        size_t mark = 0;
        while (mark + 1 < index.mark_count && index.marks[mark + 1].first_entry <= entry)
            mark++;
        windrow_keyrun_seek(&walk->reader, &index.marks[mark]);
        while (!status && walk->reader.next_entry < entry)
            status = windrow_keyrun_next(&walk->reader);
    }
    windrow_keyrun_index_free(&index);
    free(path);
    return status;
}

static enum windrow_status walk_begin(struct walk *walk, const struct windrow_table_parts *parts, uint64_t page)
{
    *walk = (struct walk){.parts = parts, .reader.frames.descriptor = -1};
    while (parts->page_bases[walk->part + 1] <= page)
        walk->part++;
    return walk_open_part(walk, page);
}

static enum windrow_status walk_next(struct walk *walk)
{
    for (;;) {
        enum windrow_status status = windrow_keyrun_next(&walk->reader);
        if (status || !walk->reader.ended)
            return status;
        do
            walk->part++;
        while (walk->part < walk->parts->part_count && walk->parts->page_bases[walk->part + 1] == walk->parts->page_bases[walk->part]);
        if (walk->part >= walk->parts->part_count)
            return windrow_fail(WINDROW_DAMAGED, "the scratch in %s holds fewer pages than it should; remove the unfinished store and shard again",
                                walk->parts->scratch);
        if ((status = walk_open_part(walk, walk->parts->page_bases[walk->part])))
            return status;
    }
}

/* What a segment's writing has put together so far. */
struct segment {
    struct table_head head;
    struct windrow_pages_writer pages;
    struct windrow_writer hosts, host_names;
    struct windrow_buffer groups, degrees;
};

static enum windrow_status add_host(struct segment *segment, uint64_t page, const struct windrow_buffer *key)
{
    enum windrow_status status;
    char *text = malloc(key->bytes + 2);
    if (!text)
        return memory();
    size_t bytes = windrow_key_host((const char *)key->data, key->bytes, text, key->bytes + 2);
    struct windrow_host_record record = {.first_page = page, .first_core = segment->head.core_pages, .name_at = segment->host_names.written_bytes,
                                         .name_bytes = (uint32_t)bytes,
                                         .domain_bytes = (uint32_t)(bytes - (size_t)(windrow_domain(text) - text))};
    status = windrow_writer_append(&segment->hosts, &record, sizeof record);
    if (!status)
        status = windrow_writer_append(&segment->host_names, text, bytes);
    segment->head.host_count++;
    free(text);
    return status;
}

static enum windrow_status add_page(struct segment *segment, uint64_t page, const struct windrow_keyrun_reader *reader, size_t shared)
{
    enum windrow_status status;
    const struct windrow_buffer *key = &reader->key;
    if (page % WINDROW_CORE_GROUP_PAGES == 0) {
        struct windrow_core_group group = {0};
        if ((status = windrow_buffer_append(&segment->groups, &group, sizeof group)))
            return status;
        segment->head.group_count++;
    }
    struct windrow_core_group *group = (struct windrow_core_group *)(segment->groups.data + segment->groups.bytes) - 1;
    unsigned word = (page % WINDROW_CORE_GROUP_PAGES) / 64;
    uint64_t bit = UINT64_C(1) << (page % 64);
    if (reader->crawled) {
        group->crawled[word] |= bit;
        segment->head.crawled_pages++;
    }
    if (reader->degree) {
        if (reader->degree > UINT32_MAX)
            return windrow_fail(WINDROW_INPUT, "a page with more than 2^32 links cannot be stored");
        uint32_t degree = (uint32_t)reader->degree;
        group->core[word] |= bit;
        segment->head.core_pages++;
        if ((status = windrow_buffer_append(&segment->degrees, &degree, sizeof degree)))
            return status;
    }
    segment->head.pages++;
    segment->head.key_bytes += key->bytes;
    return windrow_pages_put(&segment->pages, key->data, key->bytes, shared, 0);
}

static enum windrow_status write_table(const char *path, struct segment *segment)
{
    struct windrow_writer writer = {.descriptor = -1};
    enum windrow_status status = windrow_writer_open(&writer, path, true);
    segment->head.mark_count = segment->pages.marks.bytes / sizeof(struct windrow_pages_mark);
    segment->head.first_key_bytes = segment->pages.first_keys.bytes;
    if (!status)
        status = windrow_writer_append(&writer, &segment->head, sizeof segment->head);
    const struct windrow_buffer *parts[] = {&segment->pages.marks, &segment->pages.first_keys, &segment->groups, &segment->degrees};
    for (size_t part = 0; !status && part < sizeof parts / sizeof *parts; part++)
        status = windrow_writer_append(&writer, parts[part]->data, parts[part]->bytes);
    if (!status)
        status = windrow_writer_seal(&writer);
    if (!status)
        status = windrow_writer_finish(&writer, NULL);
    windrow_writer_abandon(&writer);
    return status;
}

enum windrow_status windrow_table_segment(const struct windrow_table_parts *parts, const char *store, uint64_t number)
{
    uint64_t pages = parts->page_bases[parts->part_count], first = number * WINDROW_SEGMENT_PAGES;
    uint64_t end = first + WINDROW_SEGMENT_PAGES < pages ? first + WINDROW_SEGMENT_PAGES : pages;
    struct segment segment = {.pages.file.descriptor = -1, .hosts.descriptor = -1, .host_names.descriptor = -1};
    struct walk walk = {.reader.frames.descriptor = -1};
    struct windrow_buffer before = {0};
    char *page_path = windrow_path(store, "pages/%06llu.zst", (unsigned long long)number);
    char *table_path = windrow_path(parts->scratch, "segment-%06llu.table", (unsigned long long)number);
    char *host_path = windrow_path(parts->scratch, "segment-%06llu.hosts", (unsigned long long)number);
    char *name_path = windrow_path(parts->scratch, "segment-%06llu.names", (unsigned long long)number);
    enum windrow_status status = page_path && table_path && host_path && name_path ? WINDROW_OK : memory();
    if (!status)
        status = windrow_writer_open(&segment.hosts, host_path, true);
    if (!status)
        status = windrow_writer_open(&segment.host_names, name_path, true);
    if (!status)
        status = windrow_pages_writer_open(&segment.pages, page_path, first, false);
    /* The page before the segment tells whether a host begins with it. */
    if (!status)
        status = walk_begin(&walk, parts, first ? first - 1 : 0);
    if (!status && first) {
        status = walk_next(&walk);
        if (!status)
            status = windrow_buffer_append(&before, walk.reader.key.data, walk.reader.key.bytes);
    }
    size_t before_host = first && !status ? windrow_key_host_bytes((char *)before.data, before.bytes) + 1 : 0;
    for (uint64_t page = first; !status && page < end; page++) {
        if ((status = walk_next(&walk)))
            break;
        const struct windrow_buffer *key = &walk.reader.key;
        size_t shared = windrow_keyrun_shared(before.data, before.bytes, key->data, key->bytes, 0);
        if (shared < before_host || page == 0) {
            if ((status = add_host(&segment, page, key)))
                break;
            before_host = windrow_key_host_bytes((const char *)key->data, key->bytes) + 1;
        }
        if ((status = add_page(&segment, page, &walk.reader, shared)))
            break;
        before.bytes = 0;
        status = windrow_buffer_append(&before, key->data, key->bytes);
    }
    if (!status)
        status = windrow_pages_writer_finish(&segment.pages, &segment.head.file_bytes, &segment.head.file_checksum);
    segment.head.host_name_bytes = segment.host_names.written_bytes;
    if (!status && !(status = windrow_writer_seal(&segment.hosts)))
        status = windrow_writer_finish(&segment.hosts, NULL);
    if (!status && !(status = windrow_writer_seal(&segment.host_names)))
        status = windrow_writer_finish(&segment.host_names, NULL);
    if (!status)
        status = write_table(table_path, &segment);
    windrow_keyrun_reader_close(&walk.reader);
    windrow_pages_writer_free(&segment.pages);
    windrow_writer_abandon(&segment.hosts);
    windrow_writer_abandon(&segment.host_names);
    windrow_buffer_free(&segment.groups);
    windrow_buffer_free(&segment.degrees);
    windrow_buffer_free(&before);
    free(page_path);
    free(table_path);
    free(host_path);
    free(name_path);
    return status;
}

/* ---- Assembling ---- */

enum { INDEX, KEYS, HOSTS, NAMES, CORE, DEGREES, OUTPUTS };

static enum windrow_status load_table(const char *scratch, uint64_t segment, struct windrow_buffer *bytes, struct table_head *head)
{
    char *path = windrow_path(scratch, "segment-%06llu.table", (unsigned long long)segment);
    if (!path)
        return memory();
    enum windrow_status status = windrow_sealed_load(path, bytes);
    if (!status) {
        bool good = bytes->bytes >= sizeof *head;
        if (good)
            memcpy(head, bytes->data, sizeof *head);
        if (!good || bytes->bytes != sizeof *head + head->mark_count * sizeof(struct windrow_pages_mark) + head->first_key_bytes +
                                         head->group_count * sizeof(struct windrow_core_group) + head->core_pages * sizeof(uint32_t))
            status = windrow_fail(WINDROW_DAMAGED, "the scratch file %s is damaged; remove the unfinished store and shard again", path);
    }
    free(path);
    return status;
}

/* Copies a segment's hosts or their names, a piece at a time: a segment may have as many hosts as pages. */
static enum windrow_status copy_hosts(const char *scratch, uint64_t segment, const char *kind, uint64_t expected_bytes, struct windrow_writer *out,
                                      uint64_t cores_before, uint64_t names_before)
{
    struct windrow_host_record block[4096];
    bool records = strcmp(kind, "hosts") == 0;
    uint64_t bytes;
    char *path = windrow_path(scratch, "segment-%06llu.%s", (unsigned long long)segment, kind);
    enum windrow_status status = path ? windrow_sealed_check(path, &bytes) : memory();
    if (!status && bytes != expected_bytes)
        status = windrow_fail(WINDROW_DAMAGED, "the scratch file %s is damaged; remove the unfinished store and shard again", path);
    int descriptor = status ? -1 : windrow_files.open(path, O_RDONLY, 0);
    if (!status && descriptor < 0)
        status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open the scratch file %s", path);
    for (uint64_t at = 0; !status && at < expected_bytes; at += sizeof block) {
        size_t part = expected_bytes - at < sizeof block ? (size_t)(expected_bytes - at) : sizeof block;
        status = windrow_file_read_at(descriptor, path, block, part, at);
        for (size_t index = 0; records && index < part / sizeof *block; index++) {
            block[index].first_core += cores_before;
            block[index].name_at += names_before;
        }
        if (!status)
            status = windrow_writer_append(out, block, part);
    }
    if (descriptor >= 0)
        windrow_files.close(descriptor);
    free(path);
    return status;
}

static enum windrow_status assemble_segment(struct windrow_writer *out, const uint8_t *at, const struct table_head *head,
                                            const struct windrow_table_totals *before)
{
    enum windrow_status status = WINDROW_OK;
    uint64_t keys_before = out[KEYS].written_bytes;
    for (uint64_t index = 0; !status && index < head->mark_count; index++, at += sizeof(struct windrow_pages_mark)) {
        struct windrow_pages_mark mark;
        memcpy(&mark, at, sizeof mark);
        mark.key_at += keys_before;
        status = windrow_writer_append(&out[INDEX], &mark, sizeof mark);
    }
    if (!status)
        status = windrow_writer_append(&out[KEYS], at, head->first_key_bytes);
    at += head->first_key_bytes;
    uint64_t rank = before->core_pages;
    for (uint64_t index = 0; !status && index < head->group_count; index++, at += sizeof(struct windrow_core_group)) {
        struct windrow_core_group group;
        memcpy(&group, at, sizeof group);
        group.rank = rank;
        for (size_t word = 0; word < WINDROW_CORE_GROUP_PAGES / 64; word++)
            rank += (uint64_t)__builtin_popcountll(group.core[word]);
        status = windrow_writer_append(&out[CORE], &group, sizeof group);
    }
    return status ? status : windrow_writer_append(&out[DEGREES], at, head->core_pages * sizeof(uint32_t));
}

enum windrow_status windrow_table_assemble(const char *scratch, const char *store, uint64_t segment_count, uint64_t *segment_cores,
                                           struct windrow_table_totals *totals)
{
    static const char *const names[OUTPUTS] = {"page-index", "page-keys", "hosts", "host-names", "core-map", "raw-degrees"};
    struct windrow_writer out[OUTPUTS];
    struct windrow_buffer table = {0};
    enum windrow_status status = WINDROW_OK;
    *totals = (struct windrow_table_totals){0};
    for (int output = 0; output < OUTPUTS; output++)
        out[output] = (struct windrow_writer){.descriptor = -1};
    for (int output = 0; !status && output < OUTPUTS; output++) {
        char *path = windrow_path(output == DEGREES ? scratch : store, "%s", names[output]);
        status = path ? windrow_writer_open(&out[output], path, output == DEGREES) : memory();
        free(path);
    }
    for (uint64_t segment = 0; !status && segment < segment_count; segment++) {
        struct table_head head;
        if ((status = load_table(scratch, segment, &table, &head)))
            break;
        segment_cores[segment] = totals->core_pages;
        uint64_t names_before = out[NAMES].written_bytes;
        if ((status = assemble_segment(out, table.data + sizeof head, &head, totals)) ||
            (status = copy_hosts(scratch, segment, "hosts", head.host_count * sizeof(struct windrow_host_record), &out[HOSTS], totals->core_pages,
                                 names_before)) ||
            (status = copy_hosts(scratch, segment, "names", head.host_name_bytes, &out[NAMES], 0, 0)))
            break;
        totals->pages += head.pages;
        totals->core_pages += head.core_pages;
        totals->crawled_pages += head.crawled_pages;
        totals->hosts += head.host_count;
        totals->key_bytes += head.key_bytes;
    }
    segment_cores[segment_count] = totals->core_pages;
    struct windrow_pages_mark last_mark = {totals->pages, 0, out[KEYS].written_bytes};
    struct windrow_host_record last_host = {.first_page = totals->pages, .first_core = totals->core_pages, .name_at = out[NAMES].written_bytes};
    if (!status)
        status = windrow_writer_append(&out[INDEX], &last_mark, sizeof last_mark);
    if (!status)
        status = windrow_writer_append(&out[HOSTS], &last_host, sizeof last_host);
    if (!status && totals->pages % WINDROW_CORE_GROUP_PAGES == 0) {
        /* There is a group behind the last page always, so that any number up to the count can be looked up. */
        struct windrow_core_group group = {.rank = totals->core_pages};
        status = windrow_writer_append(&out[CORE], &group, sizeof group);
    }
    if (!status)
        status = windrow_writer_seal(&out[DEGREES]);
    for (int output = 0; output < OUTPUTS; output++) {
        if (!status)
            status = windrow_writer_finish(&out[output], NULL);
        windrow_writer_abandon(&out[output]);
    }
    windrow_buffer_free(&table);
    return status;
}

enum windrow_status windrow_table_page_file(const char *scratch, uint64_t segment, uint64_t *bytes, uint64_t *checksum)
{
    struct windrow_buffer table = {0};
    struct table_head head;
    enum windrow_status status = load_table(scratch, segment, &table, &head);
    if (!status) {
        *bytes = head.file_bytes;
        *checksum = head.file_checksum;
    }
    windrow_buffer_free(&table);
    return status;
}
