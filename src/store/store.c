#include "store/store.h"

#include "store/layout.h"
#include "store/manifest.h"
#include "store/pages.h"
#include "url/key.h"
#include "url/keyer.h"

#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <xxhash.h>
#include <zstd.h>

const char *const windrow_drop_names[WINDROW_DROP_COUNT] = {"malformed", "scheme", "nofollow", "self", "duplicate", "takedown"};

/* The flat files of a store, in the order of their names below. */
enum flat { PAGE_INDEX, PAGE_KEYS, HOSTS, HOST_NAMES, CORE_MAP, DEGREES, INSIDE_DEGREES, ALIAS_INDEX, ALIAS_KEYS, FLAT_COUNT };
static const char *const flat_names[FLAT_COUNT] = {"page-index", "page-keys", "hosts", "host-names", "core-map", "degrees", "inside-degrees",
                                                   "alias-index", "alias-keys"};

/* No block is nearly as large; a manifest that claims it lies, and would have us allocate for it. */
#define BLOCK_BYTES_MOST (UINT32_C(64) << 20)
#define BLOCK_LINKS_MOST (UINT64_C(1) << 22)

struct windrow_store {
    char *path;
    struct windrow_manifest manifest;
    struct windrow_map flats[FLAT_COUNT];
    struct windrow_pages_index pages;
    struct windrow_pages_index aliases; /* frame_count 0: none */
    const struct windrow_core_group *core_groups;
    uint64_t core_group_count;
    const struct windrow_host_record *hosts;
};

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory while opening a store");
}

/* Checks a flat file against the manifest and maps it. */
static enum windrow_status open_flat(struct windrow_store *store, enum flat flat)
{
    const struct windrow_manifest_file *file = windrow_manifest_file(&store->manifest, flat_names[flat]);
    if (!file) {
        if (flat >= ALIAS_INDEX)
            return WINDROW_OK;
        return windrow_fail(WINDROW_DAMAGED, "the store %s has no %s; shard the dumps again", store->path, flat_names[flat]);
    }
    char *path = windrow_path(store->path, "%s", flat_names[flat]);
    if (!path)
        return memory();
    uint64_t bytes, checksum;
    enum windrow_status status = windrow_file_checksum(path, &bytes, &checksum);
    if (!status && (bytes != file->bytes || checksum != file->checksum))
        status = windrow_fail(WINDROW_DAMAGED, "%s does not match its checksum: it was changed or damaged; shard the dumps again", path);
    if (!status)
        status = windrow_map_open(&store->flats[flat], path);
    free(path);
    return status;
}

static enum windrow_status check_sizes(struct windrow_store *store)
{
    const struct windrow_store_facts *facts = &store->manifest.facts;
    const struct windrow_map *flats = store->flats;
    uint64_t groups = facts->pages / WINDROW_CORE_GROUP_PAGES + 1;
    bool good = facts->pages < (UINT64_C(1) << 40) && facts->core_pages <= facts->pages && facts->hosts <= facts->pages &&
                facts->core_pages + facts->dangling_pages == facts->pages &&
                flats[HOSTS].bytes == (facts->hosts + 1) * sizeof(struct windrow_host_record) &&
                flats[CORE_MAP].bytes == groups * sizeof(struct windrow_core_group) && flats[DEGREES].bytes == 4 * facts->core_pages &&
                flats[INSIDE_DEGREES].bytes == 4 * facts->core_pages;
    if (good) {
        store->hosts = (const struct windrow_host_record *)flats[HOSTS].data;
        store->core_groups = (const struct windrow_core_group *)flats[CORE_MAP].data;
        store->core_group_count = groups;
        good = store->hosts[0].first_page == 0 && store->hosts[0].first_core == 0 && store->hosts[0].name_at == 0;
        for (uint64_t host = 0; good && host < facts->hosts; host++) {
            const struct windrow_host_record *record = &store->hosts[host];
            good = record[0].first_page < record[1].first_page && record[0].first_core <= record[1].first_core &&
                   record->name_at + record->name_bytes == record[1].name_at && record->domain_bytes <= record->name_bytes;
        }
        const struct windrow_host_record *last = &store->hosts[facts->hosts];
        good = good && last->first_page == facts->pages && last->first_core == facts->core_pages && last->name_at == flats[HOST_NAMES].bytes;
    }
    for (int kind = 0; good && kind < WINDROW_BLOCK_KINDS; kind++) {
        uint64_t next = 0, targets = kind == WINDROW_BLOCK_CORE ? facts->core_pages : facts->dangling_pages;
        bool open_piece = false;
        for (uint64_t block = 0; good && block < store->manifest.block_counts[kind]; block++) {
            const struct windrow_block_record *record = &store->manifest.blocks[kind][block];
            good = record->first_target == next - open_piece && record->target_count >= 1 && record->frame_bytes && record->payload_bytes &&
                   record->frame_bytes <= BLOCK_BYTES_MOST && record->payload_bytes <= BLOCK_BYTES_MOST && record->link_count <= BLOCK_LINKS_MOST;
            if (record->flags & WINDROW_BLOCK_PIECE) {
                good = good && record->target_count == 1;
                open_piece = !(record->flags & WINDROW_BLOCK_LAST_PIECE);
            } else {
                good = good && !open_piece;
            }
            next = record->first_target + record->target_count;
        }
        good = good && next == targets && !open_piece;
    }
    if (!good)
        return windrow_fail(WINDROW_DAMAGED, "the parts of the store %s contradict each other; shard the dumps again", store->path);
    return WINDROW_OK;
}

enum windrow_status windrow_store_open(const char *path, struct windrow_store **out)
{
    *out = NULL;
    if (!windrow_file_exists(path))
        return windrow_fail(WINDROW_USAGE, "there is no store at %s; make one with windrow shard", path);
    struct windrow_manifest manifest;
    enum windrow_status status = windrow_manifest_read(path, &manifest);
    if (status == WINDROW_NO)
        return windrow_fail(WINDROW_NO, "the store %s is not finished; run its windrow shard again to go on", path);
    if (status)
        return status;
    status = windrow_store_open_manifest(path, &manifest, out);
    windrow_manifest_free(&manifest);
    return status;
}

enum windrow_status windrow_store_open_manifest(const char *path, struct windrow_manifest *manifest, struct windrow_store **out)
{
    *out = NULL;
    struct windrow_store *store = calloc(1, sizeof *store);
    if (!store)
        return memory();
    store->manifest = *manifest;
    *manifest = (struct windrow_manifest){0};
    for (int flat = 0; flat < FLAT_COUNT; flat++)
        store->flats[flat].descriptor = -1;
    enum windrow_status status = WINDROW_OK;
    if (!(store->path = strdup(path))) {
        status = memory();
        goto out;
    }
    for (int flat = 0; flat < FLAT_COUNT; flat++)
        if ((status = open_flat(store, flat)))
            goto out;
    if ((status = check_sizes(store)))
        goto out;
    /* The check has touched every host: let the pages go, they come again when they are asked for. */
    if (store->flats[HOSTS].bytes)
        madvise((void *)store->flats[HOSTS].data, store->flats[HOSTS].bytes, MADV_DONTNEED);
    if ((status = windrow_pages_index_open(&store->flats[PAGE_INDEX], &store->flats[PAGE_KEYS], store->manifest.facts.pages, &store->pages)))
        goto out;
    if (store->flats[ALIAS_INDEX].bytes) {
        /* Nothing else tells how many aliases there are: the last mark does. */
        uint64_t marks = store->flats[ALIAS_INDEX].bytes / sizeof(struct windrow_pages_mark);
        uint64_t entries = marks ? ((const struct windrow_pages_mark *)store->flats[ALIAS_INDEX].data)[marks - 1].first_entry : 0;
        status = windrow_pages_index_open(&store->flats[ALIAS_INDEX], &store->flats[ALIAS_KEYS], entries, &store->aliases);
    }
out:
    if (status) {
        windrow_store_close(store);
        return status;
    }
    *out = store;
    return WINDROW_OK;
}

void windrow_store_close(struct windrow_store *store)
{
    if (!store)
        return;
    for (int flat = 0; flat < FLAT_COUNT; flat++)
        windrow_map_close(&store->flats[flat]);
    windrow_manifest_free(&store->manifest);
    free(store->path);
    free(store);
}

const struct windrow_store_facts *windrow_store_facts(const struct windrow_store *store)
{
    return &store->manifest.facts;
}

const char *windrow_store_path(const struct windrow_store *store)
{
    return store->path;
}

const uint32_t *windrow_store_degrees(const struct windrow_store *store)
{
    return (const uint32_t *)store->flats[DEGREES].data;
}

const uint32_t *windrow_store_inside_degrees(const struct windrow_store *store)
{
    return (const uint32_t *)store->flats[INSIDE_DEGREES].data;
}

bool windrow_store_page_number(const struct windrow_store *store, uint64_t page, uint64_t *number)
{
    const struct windrow_core_group *group = &store->core_groups[page / WINDROW_CORE_GROUP_PAGES];
    unsigned word = (page % WINDROW_CORE_GROUP_PAGES) / 64, bit = page % 64;
    uint64_t rank = group->rank;
    for (unsigned index = 0; index < word; index++)
        rank += (uint64_t)__builtin_popcountll(group->core[index]);
    rank += (uint64_t)__builtin_popcountll(group->core[word] & ((UINT64_C(1) << bit) - 1));
    bool core = group->core[word] >> bit & 1;
    *number = core ? rank : page - rank;
    return core;
}

uint64_t windrow_store_core_page(const struct windrow_store *store, uint64_t core)
{
    uint64_t low = 0, high = store->core_group_count;
    while (high - low > 1) {
        uint64_t middle = low + (high - low) / 2;
        if (store->core_groups[middle].rank <= core)
            low = middle;
        else
            high = middle;
    }
    const struct windrow_core_group *group = &store->core_groups[low];
    uint64_t left = core - group->rank;
    for (unsigned word = 0; word < WINDROW_CORE_GROUP_PAGES / 64; word++) {
        uint64_t bits = group->core[word];
        uint64_t ones = (uint64_t)__builtin_popcountll(bits);
        if (left >= ones) {
            left -= ones;
            continue;
        }
        while (left--)
            bits &= bits - 1;
        return low * WINDROW_CORE_GROUP_PAGES + word * 64 + (uint64_t)__builtin_ctzll(bits);
    }
    return store->manifest.facts.pages; /* core was out of range */
}

bool windrow_store_page_crawled(const struct windrow_store *store, uint64_t page)
{
    const struct windrow_core_group *group = &store->core_groups[page / WINDROW_CORE_GROUP_PAGES];
    return group->crawled[(page % WINDROW_CORE_GROUP_PAGES) / 64] >> (page % 64) & 1;
}

struct windrow_host windrow_store_host(const struct windrow_store *store, uint64_t host)
{
    const struct windrow_host_record *record = &store->hosts[host];
    bool real = host < store->manifest.facts.hosts;
    return (struct windrow_host){.first_page = record->first_page, .first_core = record->first_core,
                                 .name = real ? (const char *)store->flats[HOST_NAMES].data + record->name_at : NULL,
                                 .name_bytes = real ? record->name_bytes : 0, .domain_bytes = real ? record->domain_bytes : 0};
}

uint64_t windrow_store_host_of_page(const struct windrow_store *store, uint64_t page)
{
    uint64_t low = 0, high = store->manifest.facts.hosts;
    while (high - low > 1) {
        uint64_t middle = low + (high - low) / 2;
        if (store->hosts[middle].first_page <= page)
            low = middle;
        else
            high = middle;
    }
    return low;
}

uint64_t windrow_store_block_count(const struct windrow_store *store, enum windrow_block_kind kind)
{
    return store->manifest.block_counts[kind];
}

const struct windrow_block_record *windrow_store_block_record(const struct windrow_store *store, enum windrow_block_kind kind, uint64_t block)
{
    return &store->manifest.blocks[kind][block];
}

/* ---- Reading blocks ---- */

struct block_reader_state {
    ZSTD_DCtx *decompressor;
    int descriptor;       /* the block file read last */
    uint32_t segment;
    enum windrow_block_kind kind;
    const struct windrow_store *store;
};

enum windrow_status windrow_store_block_read(const struct windrow_store *store, enum windrow_block_kind kind, uint64_t block,
                                             struct windrow_block_reader *reader, struct windrow_block *out)
{
    const struct windrow_block_record *record = &store->manifest.blocks[kind][block];
    struct block_reader_state *state = reader->decompressor;
    if (!state) {
        if (!(state = calloc(1, sizeof *state)))
            return memory();
        state->descriptor = -1;
        reader->decompressor = state;
        if (!(state->decompressor = ZSTD_createDCtx()))
            return memory();
    }
    char name[64];
    windrow_layout_block_file(name, sizeof name, kind, record->segment);
    char *path = windrow_path(store->path, "%s", name);
    if (!path)
        return memory();
    enum windrow_status status = WINDROW_OK;
    if (state->descriptor < 0 || state->store != store || state->segment != record->segment || state->kind != kind) {
        if (state->descriptor >= 0)
            windrow_files.close(state->descriptor);
        state->descriptor = windrow_files.open(path, O_RDONLY, 0);
        if (state->descriptor < 0) {
            status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open %s", path);
            goto out;
        }
        state->store = store;
        state->segment = record->segment;
        state->kind = kind;
    }
    reader->frame.bytes = reader->payload.bytes = 0;
    if ((status = windrow_buffer_reserve(&reader->frame, record->frame_bytes)) ||
        (status = windrow_buffer_reserve(&reader->payload, record->payload_bytes)) ||
        (status = windrow_file_read_at(state->descriptor, path, reader->frame.data, record->frame_bytes, record->offset)))
        goto out;
    reader->frame.bytes = record->frame_bytes;
    size_t bytes = 0;
    bool good = XXH3_64bits(reader->frame.data, record->frame_bytes) == record->checksum;
    if (good) {
        bytes = ZSTD_decompressDCtx(state->decompressor, reader->payload.data, record->payload_bytes, reader->frame.data, record->frame_bytes);
        good = !ZSTD_isError(bytes) && bytes == record->payload_bytes;
    }
    if (!good) {
        status = windrow_fail(WINDROW_DAMAGED, "block %llu (%s, byte %llu) is damaged; shard the dumps again", (unsigned long long)block, path,
                              (unsigned long long)record->offset);
        goto out;
    }
    reader->payload.bytes = bytes;
    status = windrow_block_parse(reader->payload.data, bytes, record, out);
    if (status)
        status = windrow_fail_within(status, "block %llu (%s, byte %llu)", (unsigned long long)block, path, (unsigned long long)record->offset);
out:
    free(path);
    return status;
}

void windrow_block_reader_free(struct windrow_block_reader *reader)
{
    struct block_reader_state *state = reader->decompressor;
    if (state) {
        if (state->descriptor >= 0)
            windrow_files.close(state->descriptor);
        ZSTD_freeDCtx(state->decompressor);
        free(state);
    }
    windrow_buffer_free(&reader->frame);
    windrow_buffer_free(&reader->payload);
    reader->decompressor = NULL;
}

/* ---- Reading pages ---- */

struct windrow_page_reader {
    const struct windrow_store *store;
    struct windrow_keyer *keyer;
    struct windrow_pages_frame frame;
    uint64_t frame_number;      /* UINT64_MAX: none */
    int descriptor;
    uint64_t segment;
    struct windrow_pages_frame alias_frame;
    uint64_t alias_frame_number;
    int alias_descriptor;
    char url[WINDROW_URL_BYTES_MAX + 1];
};

enum windrow_status windrow_page_reader_create(const struct windrow_store *store, struct windrow_page_reader **out)
{
    *out = NULL;
    struct windrow_page_reader *reader = calloc(1, sizeof *reader);
    if (!reader)
        return memory();
    reader->store = store;
    reader->frame_number = reader->alias_frame_number = UINT64_MAX;
    reader->descriptor = reader->alias_descriptor = -1;
    *out = reader;
    return WINDROW_OK;
}

void windrow_page_reader_destroy(struct windrow_page_reader *reader)
{
    if (!reader)
        return;
    if (reader->descriptor >= 0)
        windrow_files.close(reader->descriptor);
    if (reader->alias_descriptor >= 0)
        windrow_files.close(reader->alias_descriptor);
    windrow_keyer_destroy(reader->keyer);
    windrow_pages_frame_free(&reader->frame);
    windrow_pages_frame_free(&reader->alias_frame);
    free(reader);
}

static enum windrow_status read_frame(struct windrow_page_reader *reader, uint64_t frame)
{
    if (reader->frame_number == frame)
        return WINDROW_OK;
    const struct windrow_pages_index *index = &reader->store->pages;
    uint64_t segment = index->marks[frame].first_entry / WINDROW_SEGMENT_PAGES;
    char *path = windrow_path(reader->store->path, "pages/%06llu.zst", (unsigned long long)segment);
    if (!path)
        return memory();
    enum windrow_status status = WINDROW_OK;
    if (reader->descriptor < 0 || reader->segment != segment) {
        if (reader->descriptor >= 0)
            windrow_files.close(reader->descriptor);
        reader->descriptor = windrow_files.open(path, O_RDONLY, 0);
        reader->segment = segment;
        if (reader->descriptor < 0)
            status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open %s", path);
    }
    reader->frame_number = UINT64_MAX;
    if (!status)
        status = windrow_pages_frame_read(index, frame, reader->descriptor, path, false, &reader->frame);
    if (!status)
        reader->frame_number = frame;
    free(path);
    return status;
}

enum windrow_status windrow_page_reader_key(struct windrow_page_reader *reader, uint64_t page, const uint8_t **key, size_t *key_bytes)
{
    const struct windrow_pages_index *index = &reader->store->pages;
    if (page >= reader->store->manifest.facts.pages)
        return windrow_fail(WINDROW_BUG, "page %llu is not in the store", (unsigned long long)page);
    enum windrow_status status;
    bool inside = reader->frame_number != UINT64_MAX && page >= reader->frame.first_entry && page - reader->frame.first_entry < reader->frame.key_count;
    if (!inside && (status = read_frame(reader, windrow_pages_frame_of_entry(index, page))))
        return status;
    uint32_t position = (uint32_t)(page - reader->frame.first_entry);
    *key = reader->frame.keys.data + reader->frame.key_at[position];
    *key_bytes = reader->frame.key_at[position + 1] - reader->frame.key_at[position];
    return WINDROW_OK;
}

enum windrow_status windrow_page_reader_url(struct windrow_page_reader *reader, uint64_t page, const char **url, size_t *url_bytes)
{
    const uint8_t *key;
    size_t key_bytes;
    enum windrow_status status = windrow_page_reader_key(reader, page, &key, &key_bytes);
    if (status)
        return status;
    *url_bytes = windrow_key_url((const char *)key, key_bytes, reader->url, WINDROW_URL_BYTES_MAX);
    if (!*url_bytes)
        return windrow_fail(WINDROW_DAMAGED, "the key of page %llu is not well formed; shard the dumps again", (unsigned long long)page);
    reader->url[*url_bytes] = 0;
    *url = reader->url;
    return WINDROW_OK;
}

static enum windrow_status find_alias(struct windrow_page_reader *reader, const char *key, size_t key_bytes, uint64_t *page)
{
    const struct windrow_pages_index *index = &reader->store->aliases;
    uint64_t frame = windrow_pages_frame_of_key(index, (const uint8_t *)key, key_bytes);
    char *path = windrow_path(reader->store->path, "aliases.zst");
    if (!path)
        return memory();
    enum windrow_status status = WINDROW_OK;
    if (reader->alias_descriptor < 0 && (reader->alias_descriptor = windrow_files.open(path, O_RDONLY, 0)) < 0)
        status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open %s", path);
    if (!status && reader->alias_frame_number != frame) {
        status = windrow_pages_frame_read(index, frame, reader->alias_descriptor, path, true, &reader->alias_frame);
        reader->alias_frame_number = status ? UINT64_MAX : frame;
    }
    free(path);
    uint32_t position;
    if (status)
        return status;
    if (!windrow_pages_frame_find(&reader->alias_frame, (const uint8_t *)key, key_bytes, &position))
        return WINDROW_NO;
    *page = reader->alias_frame.numbers[position];
    if (*page >= reader->store->manifest.facts.pages)
        return windrow_fail(WINDROW_DAMAGED, "the alias table names a page that does not exist; shard the dumps again");
    return WINDROW_OK;
}

enum windrow_status windrow_page_reader_find_key(struct windrow_page_reader *reader, const char *key, size_t key_bytes, uint64_t *page)
{
    if (!reader->store->pages.frame_count)
        return WINDROW_NO;
    enum windrow_status status = read_frame(reader, windrow_pages_frame_of_key(&reader->store->pages, (const uint8_t *)key, key_bytes));
    if (status)
        return status;
    uint32_t position;
    if (!windrow_pages_frame_find(&reader->frame, (const uint8_t *)key, key_bytes, &position))
        return WINDROW_NO;
    *page = reader->frame.first_entry + position;
    return WINDROW_OK;
}

enum windrow_status windrow_page_reader_find(struct windrow_page_reader *reader, const char *url, size_t url_bytes, uint64_t *page, bool *folded)
{
    enum windrow_status status;
    const char *key;
    size_t key_bytes;
    *folded = false;
    if (!reader->keyer && (status = windrow_keyer_create(&reader->keyer)))
        return status;
    if (windrow_keyer_key(reader->keyer, url, url_bytes, &key, &key_bytes) != WINDROW_URL_OK)
        return windrow_fail(WINDROW_NO, "not an http or https URL");
    status = windrow_page_reader_find_key(reader, key, key_bytes, page);
    if (status == WINDROW_NO && reader->store->aliases.frame_count) {
        status = find_alias(reader, key, key_bytes, page);
        *folded = status == WINDROW_OK;
    }
    return status == WINDROW_NO ? windrow_fail(WINDROW_NO, "the crawl has no such page") : status;
}

const struct windrow_manifest *windrow_store_manifest(const struct windrow_store *store)
{
    return &store->manifest;
}

const struct windrow_pages_index *windrow_store_pages_index(const struct windrow_store *store)
{
    return &store->pages;
}

const struct windrow_pages_index *windrow_store_alias_index(const struct windrow_store *store)
{
    return &store->aliases;
}

bool windrow_store_has_aliases(const struct windrow_store *store)
{
    return store->aliases.frame_count > 0;
}

enum windrow_status windrow_store_each_alias(const struct windrow_store *store,
                                             enum windrow_status (*each)(void *context, const uint8_t *key, size_t key_bytes, uint64_t page),
                                             void *context)
{
    if (!store->aliases.frame_count)
        return WINDROW_OK;
    struct windrow_pages_frame frame = {0};
    char *path = windrow_path(store->path, "aliases.zst");
    int descriptor = path ? windrow_files.open(path, O_RDONLY, 0) : -1;
    enum windrow_status status = !path           ? memory()
                                 : descriptor < 0 ? windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open %s", path)
                                                  : WINDROW_OK;
    for (uint64_t number = 0; !status && number < store->aliases.frame_count; number++) {
        status = windrow_pages_frame_read(&store->aliases, number, descriptor, path, true, &frame);
        for (uint32_t at = 0; !status && at < frame.key_count; at++) {
            if (frame.numbers[at] >= store->manifest.facts.pages)
                status = windrow_fail(WINDROW_DAMAGED, "the alias table names a page that does not exist; shard the dumps again");
            else
                status = each(context, frame.keys.data + frame.key_at[at], frame.key_at[at + 1] - frame.key_at[at], frame.numbers[at]);
        }
    }
    if (descriptor >= 0)
        windrow_files.close(descriptor);
    windrow_pages_frame_free(&frame);
    free(path);
    return status;
}
