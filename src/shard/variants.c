#include "shard/variants.h"

#include "base/crew.h"

#include "shard/sorter.h"
#include "store/layout.h"

#include <errno.h>
#include <stdio.h>
#include <stdatomic.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>
#include <xxhash.h>

enum { HTTP = 0x01, HTTPS = 0x03 };

/* Pages that counting alone keeps in memory, of a sample where there are more. */
#define COUNTED_MOST (UINT64_C(1) << 21)

size_t windrow_variants_shared(const uint8_t *key, size_t key_bytes, uint8_t *out, unsigned *features)
{
    static const char www[] = {0x01, 'w', 'w', 'w'}; /* the last label of a host in a key is its first one */
    size_t host_bytes = windrow_key_host_bytes((const char *)key, key_bytes), kept = host_bytes;
    *features = WINDROW_VARIANT_BARE;
    if (host_bytes > sizeof www && memcmp(key + host_bytes - sizeof www, www, sizeof www) == 0) {
        kept -= sizeof www;
        *features = 0;
    }
    uint8_t *end = mempcpy(out, key, kept);
    if (key_bytes - host_bytes < 2)
        return (size_t)((uint8_t *)mempcpy(end, key + host_bytes, key_bytes - host_bytes) - out);
    uint8_t scheme = key[host_bytes + 1];
    if (scheme == HTTPS)
        *features |= WINDROW_VARIANT_HTTPS;
    *end++ = 0;
    *end++ = scheme == HTTPS ? HTTP : scheme;
    const uint8_t *path = key + host_bytes + 2, *key_end = key + key_bytes;
    size_t port_bytes = scheme != HTTP && scheme != HTTPS && key_end - path >= 2 ? 2 : 0;
    end = mempcpy(end, path, port_bytes);
    path += port_bytes;
    const uint8_t *query = memchr(path, '?', (size_t)(key_end - path)), *path_end = query ? query : key_end;
    size_t path_bytes = (size_t)(path_end - path);
    if (path_bytes > 1 && path[path_bytes - 1] == '/') {
        path_bytes--;
        *features |= WINDROW_VARIANT_SLASH;
    }
    end = mempcpy(end, path, path_bytes);
    end = mempcpy(end, path_end, (size_t)(key_end - path_end));
    return (size_t)(end - out);
}

void windrow_variants_count(struct windrow_variant_counts *counts, unsigned from_features, unsigned to_features)
{
    counts->pages++;
    switch (from_features ^ to_features) {
    case WINDROW_VARIANT_HTTPS: counts->by_scheme++; break;
    case WINDROW_VARIANT_BARE: counts->by_www++; break;
    case WINDROW_VARIANT_SLASH: counts->by_slash++; break;
    default: counts->by_several++; break;
    }
}

struct finder {
    const struct windrow_store *store;
    const char *scratch;
    uint64_t memory_bytes;
    struct windrow_variant_counts *counts;
    struct windrow_meter *meter;
    struct windrow_page_reader *reader;
    struct windrow_sorter *by_hash, *by_page, *by_shared, *by_from;
    struct windrow_buffer shared, value; /* of the record under way */
};

static enum windrow_status check_stop(const struct finder *finder)
{
    if (finder->meter && windrow_meter_stopping(finder->meter))
        return windrow_fail(WINDROW_STOPPED, "stopped while looking for variants of URLs; run the same command again");
    return WINDROW_OK;
}

/* Numbers sort as their bytes do with the most significant one first. */
static void put_number(uint8_t *out, uint64_t number)
{
    for (int byte = 7; byte >= 0; byte--, number >>= 8)
        out[byte] = (uint8_t)number;
}

static uint64_t number_at(const uint8_t *in)
{
    uint64_t number = 0;
    for (int byte = 0; byte < 8; byte++)
        number = number << 8 | in[byte];
    return number;
}

/* What the page's variants share goes into finder->shared. */
static enum windrow_status read_shared(struct finder *finder, uint64_t page, const uint8_t **key, size_t *key_bytes, unsigned *features)
{
    enum windrow_status status = windrow_page_reader_key(finder->reader, page, key, key_bytes);
    finder->shared.bytes = 0;
    if (!status)
        status = windrow_buffer_reserve(&finder->shared, *key_bytes + 1);
    if (!status)
        finder->shared.bytes = windrow_variants_shared(*key, *key_bytes, finder->shared.data, features);
    return status;
}

/* All pages -> by_hash: (hash, page). */
static enum windrow_status hash_pages(struct finder *finder)
{
    uint64_t pages = windrow_store_facts(finder->store)->pages;
    enum windrow_status status = windrow_sorter_create(finder->scratch, "variants-hash", finder->memory_bytes, &finder->by_hash);
    for (uint64_t page = 0; !status && page < pages; page++) {
        const uint8_t *key;
        size_t key_bytes;
        unsigned features;
        uint8_t numbers[16];
        if ((status = read_shared(finder, page, &key, &key_bytes, &features)))
            break;
        put_number(numbers, XXH3_64bits(finder->shared.data, finder->shared.bytes));
        put_number(numbers + 8, page);
        /* The page is part of the key: what is equal in both cannot be. */
        status = windrow_sorter_put(finder->by_hash, &(struct windrow_record){numbers, sizeof numbers, NULL, 0});
        if (finder->meter && (page + 1) % 4096 == 0)
            windrow_meter_add(finder->meter, 4096);
        if (!status && page % 65536 == 0)
            status = check_stop(finder);
    }
    return status;
}

/* by_hash -> by_page: pages whose hash is met at least twice. */
static enum windrow_status choose_pages(struct finder *finder)
{
    enum windrow_status status = windrow_sorter_create(finder->scratch, "variants-page", finder->memory_bytes / 2, &finder->by_page);
    uint8_t before[16];
    bool any = false, taken = false;
    while (!status) {
        struct windrow_record record;
        bool ended;
        if ((status = windrow_sorter_next(finder->by_hash, &record, &ended)) || ended)
            break;
        bool same = any && memcmp(before, record.key, 8) == 0;
        if (same && !taken)
            status = windrow_sorter_put(finder->by_page, &(struct windrow_record){before + 8, 8, NULL, 0});
        if (same && !status)
            status = windrow_sorter_put(finder->by_page, &(struct windrow_record){record.key + 8, 8, NULL, 0});
        taken = same;
        any = true;
        memcpy(before, record.key, sizeof before);
    }
    windrow_sorter_destroy(finder->by_hash);
    finder->by_hash = NULL;
    return status;
}

/* by_page -> by_shared: (shared text, features and key). */
static enum windrow_status read_chosen(struct finder *finder)
{
    enum windrow_status status = windrow_sorter_create(finder->scratch, "variants-shared", finder->memory_bytes / 2, &finder->by_shared);
    for (uint64_t count = 0; !status; count++) {
        struct windrow_record record;
        bool ended;
        const uint8_t *key;
        size_t key_bytes;
        unsigned features;
        if ((status = windrow_sorter_next(finder->by_page, &record, &ended)) || ended)
            break;
        if ((status = read_shared(finder, number_at(record.key), &key, &key_bytes, &features)))
            break;
        /* Best TO first: values are ordered bytewise. */
        uint8_t order = (uint8_t)(7 - features);
        finder->value.bytes = 0;
        if ((status = windrow_buffer_append(&finder->value, &order, 1)) || (status = windrow_buffer_append(&finder->value, key, key_bytes)))
            break;
        status = windrow_sorter_put(finder->by_shared, &(struct windrow_record){finder->shared.data, finder->shared.bytes, finder->value.data,
                                                                                finder->value.bytes});
        if (!status && count % 65536 == 0)
            status = check_stop(finder);
    }
    windrow_sorter_destroy(finder->by_page);
    finder->by_page = NULL;
    return status;
}

/* by_shared -> counts and, when lines are wanted, by_from: (FROM's key, TO's key). */
static enum windrow_status pair_pages(struct finder *finder)
{
    enum windrow_status status = windrow_sorter_create(finder->scratch, "variants-from", finder->memory_bytes / 2, &finder->by_from);
    finder->shared.bytes = finder->value.bytes = 0; /* of the group's first record, its TO */
    bool any = false;
    while (!status) {
        struct windrow_record record;
        bool ended;
        if ((status = windrow_sorter_next(finder->by_shared, &record, &ended)) || ended)
            break;
        if (any && record.key_bytes == finder->shared.bytes && memcmp(record.key, finder->shared.data, record.key_bytes) == 0) {
            windrow_variants_count(finder->counts, 7u - record.value[0], 7u - finder->value.data[0]);
            status = windrow_sorter_put(finder->by_from, &(struct windrow_record){record.value + 1, record.value_bytes - 1, finder->value.data + 1,
                                                                                  finder->value.bytes - 1});
            continue;
        }
        any = true;
        finder->shared.bytes = finder->value.bytes = 0;
        status = windrow_buffer_append(&finder->shared, record.key, record.key_bytes);
        if (!status)
            status = windrow_buffer_append(&finder->value, record.value, record.value_bytes);
    }
    windrow_sorter_destroy(finder->by_shared);
    finder->by_shared = NULL;
    return status;
}

static enum windrow_status append_url(struct windrow_writer *out, const uint8_t *key, size_t key_bytes, char *url, char end)
{
    size_t url_bytes = windrow_key_url((const char *)key, key_bytes, url, WINDROW_URL_BYTES_MAX);
    if (!url_bytes)
        return windrow_fail(WINDROW_DAMAGED, "a page key is not well formed");
    url[url_bytes] = end;
    return windrow_writer_append(out, url, url_bytes + 1);
}

/* Written aside and renamed: a half-written list of candidates is worse than none. */
static enum windrow_status write_lines(struct finder *finder, const char *out_path)
{
    struct windrow_writer out = {.descriptor = -1};
    char *aside = NULL, *url = malloc(WINDROW_URL_BYTES_MAX + 1);
    if (asprintf(&aside, "%s.new", out_path) < 0)
        aside = NULL;
    enum windrow_status status = aside && url ? windrow_writer_open(&out, aside, false) : windrow_fail(WINDROW_RESOURCE, "out of memory for a path");
    while (!status) {
        struct windrow_record record;
        bool ended;
        if ((status = windrow_sorter_next(finder->by_from, &record, &ended)) || ended)
            break;
        status = append_url(&out, record.key, record.key_bytes, url, '\t');
        if (!status)
            status = append_url(&out, record.value, record.value_bytes, url, '\n');
    }
    if (!status)
        status = windrow_writer_finish(&out, NULL);
    windrow_writer_abandon(&out);
    if (!status && windrow_files.rename(aside, out_path))
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot rename %s to %s", aside, out_path);
    if (status && aside)
        windrow_files.unlink(aside);
    free(aside);
    free(url);
    return status;
}

static int number_order(const void *a, const void *b)
{
    uint64_t left = *(const uint64_t *)a, right = *(const uint64_t *)b;
    return (left > right) - (left < right);
}

/* Counting alone needs no keys: what variants share by its hash, and in the hash's last three bits what each has. */
struct counting {
    struct finder *finder;
    uint64_t pages, one_in;
    uint64_t *hashes;
    atomic_uint_fast64_t count;
};
#define COUNTING_PAGES 65536

static enum windrow_status count_stretch(void *context, uint64_t task, unsigned worker)
{
    (void)worker;
    struct counting *counting = context;
    struct finder finder = {.store = counting->finder->store, .meter = counting->finder->meter};
    uint64_t first = task * COUNTING_PAGES, end = first + COUNTING_PAGES < counting->pages ? first + COUNTING_PAGES : counting->pages;
    enum windrow_status status = windrow_page_reader_create(finder.store, &finder.reader);
    if (!status)
        status = check_stop(&finder);
    for (uint64_t page = first; !status && page < end; page++) {
        const uint8_t *key;
        size_t key_bytes;
        unsigned features;
        if ((status = read_shared(&finder, page, &key, &key_bytes, &features)))
            break;
        uint64_t hash = XXH3_64bits(finder.shared.data, finder.shared.bytes);
        if (hash % counting->one_in)
            continue;
        uint64_t at = atomic_fetch_add(&counting->count, 1);
        if (at < COUNTED_MOST * 5 / 4)
            counting->hashes[at] = (hash & ~UINT64_C(7)) | features;
    }
    if (!status && finder.meter)
        windrow_meter_add(finder.meter, end - first);
    windrow_page_reader_destroy(finder.reader);
    windrow_buffer_free(&finder.shared);
    return status;
}

static enum windrow_status count_only(struct finder *finder)
{
    struct counting counting = {.finder = finder, .pages = windrow_store_facts(finder->store)->pages};
    counting.one_in = counting.pages / COUNTED_MOST + 1;
    counting.hashes = malloc((COUNTED_MOST * 5 / 4 + 1) * sizeof *counting.hashes);
    struct windrow_crew *crew = NULL;
    enum windrow_status status = counting.hashes ? windrow_crew_create(windrow_crew_default_workers(), &crew)
                                                 : windrow_fail(WINDROW_RESOURCE, "out of memory for counting variants");
    if (!status)
        status = windrow_crew_run(crew, (counting.pages + COUNTING_PAGES - 1) / COUNTING_PAGES, count_stretch, &counting);
    windrow_crew_destroy(crew);
    if (!status) {
        uint64_t *hashes = counting.hashes, count = atomic_load(&counting.count);
        if (count > COUNTED_MOST * 5 / 4)
            count = COUNTED_MOST * 5 / 4;
        qsort(hashes, count, sizeof *hashes, number_order);
        /* The best of a group stands last. */
        for (uint64_t at = 0; at + 1 < count; at++) {
            uint64_t best = at;
            while (best + 1 < count && hashes[best + 1] >> 3 == hashes[at] >> 3)
                best++;
            if (best > at)
                windrow_variants_count(finder->counts, hashes[at] & 7, hashes[best] & 7);
        }
        struct windrow_variant_counts *counts = finder->counts;
        uint64_t *const all[] = {&counts->pages, &counts->by_scheme, &counts->by_www, &counts->by_slash, &counts->by_several};
        for (size_t number = 0; number < sizeof all / sizeof all[0]; number++)
            *all[number] *= counting.one_in;
        counts->one_in = counting.one_in;
    }
    free(counting.hashes);
    return status;
}

enum windrow_status windrow_variants_find(const struct windrow_store *store, const char *scratch, uint64_t memory_bytes, const char *out_path,
                                          struct windrow_variant_counts *counts, struct windrow_meter *meter)
{
    *counts = (struct windrow_variant_counts){.one_in = 1};
    struct finder finder = {.store = store, .scratch = scratch, .memory_bytes = memory_bytes, .counts = counts, .meter = meter};
    enum windrow_status status = windrow_page_reader_create(store, &finder.reader);
    if (!status && !out_path) {
        status = count_only(&finder);
    } else if (!status) {
        if ((status = hash_pages(&finder)) || (status = choose_pages(&finder)) || (status = read_chosen(&finder)) || (status = pair_pages(&finder)))
            goto out;
        status = write_lines(&finder, out_path);
    }
out:
    windrow_sorter_destroy(finder.by_hash);
    windrow_sorter_destroy(finder.by_page);
    windrow_sorter_destroy(finder.by_shared);
    windrow_sorter_destroy(finder.by_from);
    windrow_page_reader_destroy(finder.reader);
    windrow_buffer_free(&finder.shared);
    windrow_buffer_free(&finder.value);
    return status;
}

enum windrow_status windrow_suggest_aliases(const char *path, uint64_t memory_bytes, const char *out_path, struct windrow_variant_counts *counts,
                                            const struct windrow_watch *watch)
{
    struct windrow_store *store = NULL;
    struct windrow_meter meter;
    *counts = (struct windrow_variant_counts){0};
    windrow_meter_start(&meter, watch ? watch : &(struct windrow_watch){0});
    char *scratch = windrow_path(path, "ledger/variants-%d", (int)getpid());
    enum windrow_status status = scratch ? windrow_store_open(path, &store) : windrow_fail(WINDROW_RESOURCE, "out of memory for a path");
    if (!status)
        status = windrow_directory_make(scratch);
    if (!status) {
        windrow_meter_stage(&meter, "looking for variants of URLs", "pages", windrow_store_facts(store)->pages);
        status = windrow_variants_find(store, scratch, memory_bytes / 20 * 19, out_path, counts, &meter);
        windrow_meter_stage_end(&meter);
        enum windrow_status removed = windrow_directory_remove(scratch);
        status = status ? status : removed;
    }
    windrow_store_close(store);
    windrow_meter_finish(&meter);
    free(scratch);
    return status;
}
