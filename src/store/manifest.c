#include "store/manifest.h"

#include <errno.h>
#include <lmdb.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <xxhash.h>

#define MAP_BYTES ((size_t)1 << 36) /* a ceiling on address space; the file grows by use */
#define KEY_BYTES_MOST 500
#define VALUE_BYTES_MOST 1024

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory for a store's manifest");
}

enum windrow_status windrow_manifest_add_file(struct windrow_manifest *manifest, const char *name, uint64_t bytes, uint64_t checksum)
{
    struct windrow_manifest_file *files = realloc(manifest->files, (manifest->file_count + 1) * sizeof *files);
    if (!files)
        return memory();
    manifest->files = files;
    char *copy = strdup(name);
    if (!copy)
        return memory();
    files[manifest->file_count++] = (struct windrow_manifest_file){copy, bytes, checksum};
    return WINDROW_OK;
}

enum windrow_status windrow_manifest_add_blocks(struct windrow_manifest *manifest, enum windrow_block_kind kind,
                                                const struct windrow_block_record *records, uint64_t count)
{
    if (!count)
        return WINDROW_OK;
    uint64_t have = manifest->block_counts[kind];
    struct windrow_block_record *blocks = realloc(manifest->blocks[kind], (have + count) * sizeof *blocks);
    if (!blocks)
        return memory();
    memcpy(blocks + have, records, count * sizeof *blocks);
    manifest->blocks[kind] = blocks;
    manifest->block_counts[kind] = have + count;
    return WINDROW_OK;
}

void windrow_manifest_free(struct windrow_manifest *manifest)
{
    for (size_t index = 0; index < manifest->file_count; index++)
        free(manifest->files[index].name);
    free(manifest->files);
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
        free(manifest->blocks[kind]);
    free(manifest->domain_library);
    free(manifest->idn_library);
    free(manifest->zstd_library);
    *manifest = (struct windrow_manifest){0};
}

const struct windrow_manifest_file *windrow_manifest_file(const struct windrow_manifest *manifest, const char *name)
{
    for (size_t index = 0; index < manifest->file_count; index++)
        if (strcmp(manifest->files[index].name, name) == 0)
            return &manifest->files[index];
    return NULL;
}

/* ---- Values: little-endian whatever the machine ---- */

static void put64(uint8_t *out, uint64_t value)
{
    for (int byte = 0; byte < 8; byte++)
        out[byte] = (uint8_t)(value >> (8 * byte));
}

static uint64_t get64(const uint8_t *in)
{
    uint64_t value = 0;
    for (int byte = 7; byte >= 0; byte--)
        value = value << 8 | in[byte];
    return value;
}

/* The order of these numbers in the record "facts" is part of the format. */
static size_t facts_numbers(struct windrow_store_facts *facts, uint64_t **numbers)
{
    size_t count = 0;
    numbers[count++] = &facts->pages;
    numbers[count++] = &facts->crawled_pages;
    numbers[count++] = &facts->dangling_pages;
    numbers[count++] = &facts->core_pages;
    numbers[count++] = &facts->links;
    numbers[count++] = &facts->core_links;
    numbers[count++] = &facts->hosts;
    numbers[count++] = &facts->key_bytes;
    return count;
}
#define FACTS_NUMBERS 8

#define RECORD_BYTES 56
static void record_put(uint8_t *out, const struct windrow_block_record *record)
{
    put64(out, record->first_target);
    put64(out + 8, record->link_count);
    put64(out + 16, record->offset);
    put64(out + 24, record->checksum);
    put64(out + 32, record->target_count | (uint64_t)record->segment << 32);
    put64(out + 40, record->frame_bytes | (uint64_t)record->payload_bytes << 32);
    put64(out + 48, record->flags);
}

static void record_get(const uint8_t *in, struct windrow_block_record *record)
{
    record->first_target = get64(in);
    record->link_count = get64(in + 8);
    record->offset = get64(in + 16);
    record->checksum = get64(in + 24);
    record->target_count = (uint32_t)get64(in + 32);
    record->segment = (uint32_t)(get64(in + 32) >> 32);
    record->frame_bytes = (uint32_t)get64(in + 40);
    record->payload_bytes = (uint32_t)(get64(in + 40) >> 32);
    record->flags = (uint32_t)get64(in + 48);
}

/* ---- LMDB ---- */

static enum windrow_status lmdb_failure(int code, const char *path, bool writing)
{
    if (code == ENOMEM || code == ENOSPC || code == MDB_MAP_FULL || code == EDQUOT)
        return windrow_fail(WINDROW_RESOURCE, "cannot write the manifest in %s: %s", path, mdb_strerror(code));
    return windrow_fail(writing ? WINDROW_RESOURCE : WINDROW_DAMAGED, "cannot %s the manifest in %s: %s", writing ? "write" : "read", path,
                        mdb_strerror(code));
}

struct sink {
    MDB_txn *transaction;
    MDB_dbi database;
    XXH3_state_t *fingerprint;
    const char *path;
};

static enum windrow_status put(struct sink *sink, const char *key, const void *value, size_t bytes)
{
    uint8_t sealed[VALUE_BYTES_MOST + 8];
    if (bytes > VALUE_BYTES_MOST || strlen(key) > KEY_BYTES_MOST)
        return windrow_fail(WINDROW_BUG, "the manifest record %s is too long", key);
    memcpy(sealed, value, bytes);
    XXH3_state_t *state = XXH3_createState();
    if (!state)
        return memory();
    XXH3_64bits_reset(state);
    XXH3_64bits_update(state, key, strlen(key) + 1);
    XXH3_64bits_update(state, value, bytes);
    put64(sealed + bytes, XXH3_64bits_digest(state));
    XXH3_freeState(state);
    XXH3_64bits_update(sink->fingerprint, key, strlen(key) + 1);
    XXH3_64bits_update(sink->fingerprint, sealed, bytes + 8);
    MDB_val lmdb_key = {strlen(key), (void *)key}, lmdb_value = {bytes + 8, sealed};
    int code = mdb_put(sink->transaction, sink->database, &lmdb_key, &lmdb_value, MDB_APPEND);
    return code ? lmdb_failure(code, sink->path, true) : WINDROW_OK;
}

static int file_order(const void *a, const void *b)
{
    return strcmp(((const struct windrow_manifest_file *)a)->name, ((const struct windrow_manifest_file *)b)->name);
}

static const char *const kind_names[WINDROW_BLOCK_KINDS] = {"core", "rim"};

static enum windrow_status put_all(struct sink *sink, struct windrow_manifest *manifest)
{
    enum windrow_status status;
    char key[KEY_BYTES_MOST + 1];
    uint8_t value[VALUE_BYTES_MOST];
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
        for (uint64_t block = 0; block < manifest->block_counts[kind]; block++) {
            snprintf(key, sizeof key, "block/%s/%012llu", kind_names[kind], (unsigned long long)block);
            record_put(value, &manifest->blocks[kind][block]);
            if ((status = put(sink, key, value, RECORD_BYTES)))
                return status;
        }
    uint64_t *numbers[FACTS_NUMBERS];
    size_t count = facts_numbers(&manifest->facts, numbers);
    for (size_t index = 0; index < count; index++)
        put64(value + 8 * index, *numbers[index]);
    if ((status = put(sink, "facts", value, 8 * count)))
        return status;
    qsort(manifest->files, manifest->file_count, sizeof *manifest->files, file_order);
    for (size_t index = 0; index < manifest->file_count; index++) {
        snprintf(key, sizeof key, "file/%s", manifest->files[index].name);
        put64(value, manifest->files[index].bytes);
        put64(value + 8, manifest->files[index].checksum);
        if ((status = put(sink, key, value, 16)))
            return status;
    }
    put64(value, WINDROW_FORMAT_VERSION);
    if ((status = put(sink, "format", value, 8)))
        return status;
    if ((status = put(sink, "library/domain", manifest->domain_library, strlen(manifest->domain_library))))
        return status;
    if ((status = put(sink, "library/idn", manifest->idn_library, strlen(manifest->idn_library))))
        return status;
    return put(sink, "library/zstd", manifest->zstd_library, strlen(manifest->zstd_library));
}

#define SEAL_BYTES_MOST 200

static size_t seal_text(char *text, unsigned long long bytes, unsigned long long checksum, unsigned long long fingerprint)
{
    return (size_t)snprintf(text, SEAL_BYTES_MOST, "windrow store, format %d\nmanifest %llu bytes, checksum %016llx\nfingerprint %016llx\n",
                            WINDROW_FORMAT_VERSION, bytes, checksum, fingerprint);
}

enum windrow_status windrow_manifest_write(const char *path, struct windrow_manifest *manifest)
{
    enum windrow_status status = WINDROW_OK;
    MDB_env *environment = NULL;
    struct sink sink = {.path = path};
    char *directory = windrow_path(path, "manifest"), *data = windrow_path(path, "manifest/data.mdb"), *seal = windrow_path(path, "seal");
    sink.fingerprint = XXH3_createState();
    if (!directory || !data || !seal || !sink.fingerprint) {
        status = memory();
        goto out;
    }
    XXH3_64bits_reset(sink.fingerprint);
    /* A manifest without a seal is one that was being written: start it anew. */
    if ((status = windrow_directory_remove(directory)) || (status = windrow_directory_make(directory)))
        goto out;
    int code = mdb_env_create(&environment);
    if (!code)
        code = mdb_env_set_mapsize(environment, MAP_BYTES);
    if (!code)
        code = mdb_env_open(environment, directory, MDB_NOLOCK, 0644);
    if (!code)
        code = mdb_txn_begin(environment, NULL, 0, &sink.transaction);
    if (!code)
        code = mdb_dbi_open(sink.transaction, NULL, 0, &sink.database);
    if (code) {
        status = lmdb_failure(code, path, true);
        goto out;
    }
    if ((status = put_all(&sink, manifest)))
        goto out;
    code = mdb_txn_commit(sink.transaction);
    sink.transaction = NULL;
    if (code) {
        status = lmdb_failure(code, path, true);
        goto out;
    }
    mdb_env_close(environment);
    environment = NULL;
    manifest->facts.fingerprint = XXH3_64bits_digest(sink.fingerprint);
    /* The manifest's name is durable before the seal's is. */
    if ((status = windrow_directory_sync(directory)) || (status = windrow_directory_sync(path)))
        goto out;
    uint64_t bytes, checksum;
    if ((status = windrow_file_checksum(data, &bytes, &checksum)))
        goto out;
    char text[SEAL_BYTES_MOST];
    size_t length = seal_text(text, bytes, checksum, manifest->facts.fingerprint);
    status = windrow_file_replace(seal, text, length);
out:
    if (sink.transaction)
        mdb_txn_abort(sink.transaction);
    if (environment)
        mdb_env_close(environment);
    XXH3_freeState(sink.fingerprint);
    free(directory);
    free(data);
    free(seal);
    return status;
}

static enum windrow_status check_seal(const char *path, uint64_t *fingerprint)
{
    enum windrow_status status;
    char *data = windrow_path(path, "manifest/data.mdb"), *seal = windrow_path(path, "seal");
    struct windrow_buffer text = {0};
    if (!data || !seal) {
        status = memory();
        goto out;
    }
    if ((status = windrow_file_load(seal, 4096, &text)))
        goto out;
    if ((status = windrow_buffer_append(&text, "", 1)))
        goto out;
    int version;
    unsigned long long sealed_bytes, sealed_checksum, sealed_fingerprint;
    if (sscanf((const char *)text.data, "windrow store, format %d\nmanifest %llu bytes, checksum %llx\nfingerprint %llx", &version, &sealed_bytes,
               &sealed_checksum, &sealed_fingerprint) != 4) {
        status = windrow_fail(WINDROW_DAMAGED, "%s is damaged; shard the dumps again", seal);
        goto out;
    }
    if (version != WINDROW_FORMAT_VERSION) {
        status = windrow_fail(WINDROW_DAMAGED, "the store %s has format %d; this windrow reads format %d: shard the dumps again", path, version,
                              WINDROW_FORMAT_VERSION);
        goto out;
    }
    char exact[SEAL_BYTES_MOST];
    size_t length = seal_text(exact, sealed_bytes, sealed_checksum, sealed_fingerprint);
    if (text.bytes != length + 1 || memcmp(text.data, exact, length) != 0) {
        status = windrow_fail(WINDROW_DAMAGED, "%s is damaged; shard the dumps again", seal);
        goto out;
    }
    uint64_t bytes, checksum;
    if ((status = windrow_file_checksum(data, &bytes, &checksum)))
        goto out;
    if (bytes != sealed_bytes || checksum != sealed_checksum)
        status = windrow_fail(WINDROW_DAMAGED, "%s does not match its seal: it was changed or damaged; shard the dumps again", data);
    *fingerprint = sealed_fingerprint;
out:
    windrow_buffer_free(&text);
    free(data);
    free(seal);
    return status;
}

static enum windrow_status take(struct windrow_manifest *manifest, const char *key, const uint8_t *value, size_t bytes)
{
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++) {
        char prefix[16];
        int length = snprintf(prefix, sizeof prefix, "block/%s/", kind_names[kind]);
        if (strncmp(key, prefix, (size_t)length) == 0 && bytes == RECORD_BYTES) {
            struct windrow_block_record record;
            record_get(value, &record);
            return windrow_manifest_add_blocks(manifest, kind, &record, 1);
        }
    }
    if (strcmp(key, "facts") == 0 && bytes == 8 * FACTS_NUMBERS) {
        uint64_t *numbers[FACTS_NUMBERS];
        size_t count = facts_numbers(&manifest->facts, numbers);
        for (size_t index = 0; index < count; index++)
            *numbers[index] = get64(value + 8 * index);
        return WINDROW_OK;
    }
    if (strncmp(key, "file/", 5) == 0 && bytes == 16)
        return windrow_manifest_add_file(manifest, key + 5, get64(value), get64(value + 8));
    if (strcmp(key, "format") == 0 && bytes == 8 && get64(value) == WINDROW_FORMAT_VERSION)
        return WINDROW_OK;
    char **text = strcmp(key, "library/domain") == 0 ? &manifest->domain_library
                  : strcmp(key, "library/idn") == 0  ? &manifest->idn_library
                  : strcmp(key, "library/zstd") == 0 ? &manifest->zstd_library
                                                     : NULL;
    if (!text)
        return windrow_fail(WINDROW_DAMAGED, "the manifest holds an unknown record %s", key);
    *text = strndup((const char *)value, bytes);
    return *text ? WINDROW_OK : memory();
}

enum windrow_status windrow_manifest_read(const char *path, struct windrow_manifest *manifest)
{
    *manifest = (struct windrow_manifest){0};
    enum windrow_status status = check_seal(path, &manifest->facts.fingerprint);
    if (status)
        return status;
    MDB_env *environment = NULL;
    MDB_txn *transaction = NULL;
    MDB_cursor *cursor = NULL;
    MDB_dbi database;
    XXH3_state_t *fingerprint = XXH3_createState();
    char *directory = windrow_path(path, "manifest");
    if (!directory || !fingerprint) {
        free(directory);
        XXH3_freeState(fingerprint);
        return memory();
    }
    XXH3_64bits_reset(fingerprint);
    int code = mdb_env_create(&environment);
    if (!code)
        code = mdb_env_set_mapsize(environment, MAP_BYTES);
    if (!code)
        code = mdb_env_open(environment, directory, MDB_RDONLY | MDB_NOLOCK, 0644);
    if (!code)
        code = mdb_txn_begin(environment, NULL, MDB_RDONLY, &transaction);
    if (!code)
        code = mdb_dbi_open(transaction, NULL, 0, &database);
    if (!code)
        code = mdb_cursor_open(transaction, database, &cursor);
    MDB_val lmdb_key, lmdb_value;
    while (!code && !status && !(code = mdb_cursor_get(cursor, &lmdb_key, &lmdb_value, MDB_NEXT))) {
        char key[KEY_BYTES_MOST + 1];
        if (lmdb_key.mv_size > KEY_BYTES_MOST || lmdb_value.mv_size < 8 || lmdb_value.mv_size > VALUE_BYTES_MOST + 8) {
            status = windrow_fail(WINDROW_DAMAGED, "the manifest in %s holds a record of an impossible size", path);
            break;
        }
        memcpy(key, lmdb_key.mv_data, lmdb_key.mv_size);
        key[lmdb_key.mv_size] = 0;
        const uint8_t *value = lmdb_value.mv_data;
        size_t bytes = lmdb_value.mv_size - 8;
        uint8_t joined[KEY_BYTES_MOST + 1 + VALUE_BYTES_MOST];
        memcpy(joined, key, lmdb_key.mv_size + 1);
        memcpy(joined + lmdb_key.mv_size + 1, value, bytes);
        if (XXH3_64bits(joined, lmdb_key.mv_size + 1 + bytes) != get64(value + bytes)) {
            status = windrow_fail(WINDROW_DAMAGED, "the manifest record %s in %s is damaged; shard the dumps again", key, path);
            break;
        }
        XXH3_64bits_update(fingerprint, key, lmdb_key.mv_size + 1);
        XXH3_64bits_update(fingerprint, value, lmdb_value.mv_size);
        status = take(manifest, key, value, bytes);
    }
    if (!status && code != MDB_NOTFOUND)
        status = lmdb_failure(code, path, false);
    if (!status && (!manifest->domain_library || !manifest->idn_library || !manifest->zstd_library))
        status = windrow_fail(WINDROW_DAMAGED, "the manifest in %s lacks records; shard the dumps again", path);
    if (!status && XXH3_64bits_digest(fingerprint) != manifest->facts.fingerprint)
        status = windrow_fail(WINDROW_DAMAGED, "the records of the manifest in %s do not have the fingerprint of its seal; shard the dumps again", path);
    if (cursor)
        mdb_cursor_close(cursor);
    if (transaction)
        mdb_txn_abort(transaction);
    if (environment)
        mdb_env_close(environment);
    XXH3_freeState(fingerprint);
    free(directory);
    if (status)
        windrow_manifest_free(manifest);
    return status;
}
