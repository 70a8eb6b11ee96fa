#include "shard/drop.h"

#include "base/file.h"
#include "dump/reader.h"
#include "url/keyer.h"

#include <stdlib.h>
#include <string.h>
#include <xxhash.h>

/* Hosts are held as the host part of a key, which no key of a page equals: those go on behind it. */
struct entry {
    uint64_t hash;
    uint64_t text_at;
    uint64_t text_bytes; /* 0: free, since no text is empty */
};

struct windrow_drop_set {
    struct windrow_buffer texts;
    struct entry *slots;
    size_t slot_count; /* a power of two */
    size_t count;
    uint64_t fingerprint;
};

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory for the URLs and hosts to drop");
}

static struct entry *find(const struct windrow_drop_set *drop, const char *text, size_t text_bytes, uint64_t hash)
{
    size_t at = hash & (drop->slot_count - 1);
    for (; drop->slots[at].text_bytes; at = (at + 1) & (drop->slot_count - 1)) {
        const struct entry *entry = &drop->slots[at];
        if (entry->hash == hash && entry->text_bytes == text_bytes && memcmp(drop->texts.data + entry->text_at, text, text_bytes) == 0)
            break;
    }
    return &drop->slots[at];
}

static enum windrow_status grow(struct windrow_drop_set *drop)
{
    struct entry *old = drop->slots;
    size_t old_count = drop->slot_count;
    drop->slot_count = old_count ? 2 * old_count : 1024;
    drop->slots = calloc(drop->slot_count, sizeof *drop->slots);
    if (!drop->slots) {
        free(old);
        drop->slot_count = 0;
        return memory();
    }
    for (size_t slot = 0; slot < old_count; slot++) {
        if (!old[slot].text_bytes)
            continue;
        size_t at = old[slot].hash & (drop->slot_count - 1);
        while (drop->slots[at].text_bytes)
            at = (at + 1) & (drop->slot_count - 1);
        drop->slots[at] = old[slot];
    }
    free(old);
    return WINDROW_OK;
}

static enum windrow_status add(struct windrow_drop_set *drop, const char *text, size_t text_bytes)
{
    enum windrow_status status;
    if (drop->count >= drop->slot_count / 2 && (status = grow(drop)))
        return status;
    uint64_t hash = XXH3_64bits(text, text_bytes);
    struct entry *entry = find(drop, text, text_bytes, hash);
    if (entry->text_bytes)
        return WINDROW_OK;
    uint64_t at = drop->texts.bytes;
    if ((status = windrow_buffer_append(&drop->texts, text, text_bytes)))
        return status;
    *entry = (struct entry){hash, at, text_bytes};
    drop->count++;
    /* A sum, so that the order of lines does not matter. */
    drop->fingerprint += XXH3_64bits_withSeed(text, text_bytes, 1);
    return WINDROW_OK;
}

static enum windrow_status take_line(struct windrow_drop_set *drop, struct windrow_keyer *keyer, const struct windrow_dump_line *line, const char *path,
                                     struct windrow_buffer *url)
{
    enum windrow_status status;
    bool host = !memmem(line->source, line->source_bytes, "://", 3);
    url->bytes = 0;
    /* A host is read as a URL's, so it is brought to the same normal form; it has no path of its own. */
    if (host && (status = windrow_buffer_append(url, "http://", 7)))
        return status;
    if ((status = windrow_buffer_append(url, line->source, line->source_bytes)))
        return status;
    const char *key;
    size_t key_bytes;
    enum windrow_url_verdict verdict = windrow_keyer_key(keyer, (const char *)url->data, url->bytes, &key, &key_bytes);
    if (verdict == WINDROW_URL_MEMORY)
        return memory();
    if (host && memchr(line->source, '/', line->source_bytes))
        verdict = WINDROW_URL_MALFORMED;
    if (verdict != WINDROW_URL_OK)
        return windrow_fail(WINDROW_INPUT, "%s, line %llu: neither a URL nor a host name", path, (unsigned long long)line->number);
    size_t host_bytes = windrow_key_host_bytes(key, key_bytes);
    if (!host)
        return add(drop, key, key_bytes);
    /* What stands behind the host must be http's default port and the empty path. */
    if (key_bytes != host_bytes + 3)
        return windrow_fail(WINDROW_INPUT, "%s, line %llu: a host name alone is wanted, without port or path", path, (unsigned long long)line->number);
    return add(drop, key, host_bytes);
}

enum windrow_status windrow_drop_load(const char *path, struct windrow_drop_set **out)
{
    *out = NULL;
    struct windrow_dump *dump = NULL;
    struct windrow_dump_chunk chunk = {0};
    struct windrow_keyer *keyer = NULL;
    struct windrow_buffer url = {0};
    struct windrow_drop_set *drop = calloc(1, sizeof *drop);
    const char *const paths[] = {path};
    struct windrow_dump_options options = {.paths = paths, .path_count = 1, .shape = WINDROW_DUMP_LISTS};
    enum windrow_status status = drop ? grow(drop) : memory();
    if (status || (status = windrow_keyer_create(&keyer)) || (status = windrow_dump_open(&options, NULL, &dump)))
        goto out;
    while (!(status = windrow_dump_read(dump, &chunk)) && chunk.bytes) {
        struct windrow_dump_lines lines;
        struct windrow_dump_line line;
        windrow_dump_lines_begin(&lines, &chunk);
        while (windrow_dump_lines_next(&lines, &line))
            if (!line.continued && (status = take_line(drop, keyer, &line, path, &url)))
                goto out;
    }
out:
    windrow_dump_chunk_free(&chunk);
    windrow_dump_close(dump);
    windrow_keyer_destroy(keyer);
    windrow_buffer_free(&url);
    if (status) {
        windrow_drop_free(drop);
        return windrow_fail_within(status, "reading what to drop");
    }
    *out = drop;
    return WINDROW_OK;
}

void windrow_drop_free(struct windrow_drop_set *drop)
{
    if (!drop)
        return;
    windrow_buffer_free(&drop->texts);
    free(drop->slots);
    free(drop);
}

bool windrow_drop_has(const struct windrow_drop_set *drop, const char *key, size_t key_bytes)
{
    if (!drop)
        return false;
    size_t host_bytes = windrow_key_host_bytes(key, key_bytes);
    return find(drop, key, host_bytes, XXH3_64bits(key, host_bytes))->text_bytes || find(drop, key, key_bytes, XXH3_64bits(key, key_bytes))->text_bytes;
}

size_t windrow_drop_count(const struct windrow_drop_set *drop)
{
    return drop->count;
}

uint64_t windrow_drop_memory_bytes(const struct windrow_drop_set *drop)
{
    return drop ? drop->texts.capacity_bytes + drop->slot_count * sizeof *drop->slots : 0;
}

uint64_t windrow_drop_fingerprint(const struct windrow_drop_set *drop)
{
    return drop ? XXH3_64bits_withSeed(&drop->fingerprint, sizeof drop->fingerprint, drop->count) : 0;
}
