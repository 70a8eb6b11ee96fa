/* The manifest comes back as it was written, once and the same everywhere; damaged or incomplete ones are not believed. */
#include "store/manifest.h"

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <lmdb.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

static void manifest_make(struct dice *dice, struct windrow_manifest *manifest, uint64_t blocks)
{
    *manifest = (struct windrow_manifest){.facts = {.pages = dice_next(dice), .crawled_pages = dice_next(dice), .dangling_pages = dice_next(dice),
                                                    .core_pages = dice_next(dice), .links = dice_next(dice), .core_links = dice_next(dice),
                                                    .hosts = dice_next(dice), .key_bytes = dice_next(dice)}};
    manifest->domain_library = memory_text("domains 1");
    manifest->idn_library = memory_text("idn 2");
    manifest->zstd_library = memory_text("zstd 3");
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
        for (uint64_t block = 0; block < blocks; block++) {
            struct windrow_block_record record = {
                .first_target = dice_next(dice), .link_count = dice_next(dice), .offset = dice_next(dice), .checksum = dice_next(dice),
                .target_count = (uint32_t)dice_next(dice), .segment = (uint32_t)dice_next(dice), .frame_bytes = (uint32_t)dice_next(dice),
                .payload_bytes = (uint32_t)dice_next(dice), .flags = dice_below(dice, 8)};
            assert_int_equal(windrow_manifest_add_blocks(manifest, kind, &record, 1), WINDROW_OK);
        }
    static const char *const names[] = {"pages/000001.zst", "hosts", "pages/000000.zst", "degrees"};
    for (size_t index = 0; index < sizeof names / sizeof *names; index++)
        assert_int_equal(windrow_manifest_add_file(manifest, names[index], dice_next(dice), dice_next(dice)), WINDROW_OK);
}

static void expect_same(const struct windrow_manifest *a, const struct windrow_manifest *b)
{
    assert_memory_equal(&a->facts, &b->facts, sizeof a->facts);
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++) {
        assert_int_equal(a->block_counts[kind], b->block_counts[kind]);
        for (uint64_t block = 0; block < a->block_counts[kind]; block++) {
            const struct windrow_block_record *left = &a->blocks[kind][block], *right = &b->blocks[kind][block];
            assert_true(left->first_target == right->first_target && left->link_count == right->link_count && left->offset == right->offset &&
                        left->checksum == right->checksum && left->target_count == right->target_count && left->segment == right->segment &&
                        left->frame_bytes == right->frame_bytes && left->payload_bytes == right->payload_bytes && left->flags == right->flags);
        }
    }
    assert_int_equal(a->file_count, b->file_count);
    for (size_t index = 0; index < a->file_count; index++) {
        const struct windrow_manifest_file *file = windrow_manifest_file(b, a->files[index].name);
        assert_non_null(file);
        assert_true(file->bytes == a->files[index].bytes && file->checksum == a->files[index].checksum);
    }
    assert_string_equal(a->domain_library, b->domain_library);
    assert_string_equal(a->idn_library, b->idn_library);
    assert_string_equal(a->zstd_library, b->zstd_library);
}

static void test_round_trip(void **state)
{
    (void)state;
    struct dice dice = {61};
    char *store = scratch_make();
    for (uint64_t blocks = 0; blocks < 3000; blocks = blocks * 50 + 1) {
        struct windrow_manifest written, read;
        manifest_make(&dice, &written, blocks);
        assert_int_equal(windrow_manifest_write(store, &written), WINDROW_OK);
        assert_int_equal(windrow_manifest_read(store, &read), WINDROW_OK);
        expect_same(&written, &read);
        assert_null(windrow_manifest_file(&read, "nothing"));
        windrow_manifest_free(&written);
        windrow_manifest_free(&read);
    }
    scratch_remove(store);
}

/* The fingerprint does not depend on where the store lies, nor on the order in which files were added. */
static void test_fingerprint(void **state)
{
    (void)state;
    struct dice dice = {62};
    char *stores[2] = {scratch_make(), scratch_make()};
    struct windrow_manifest manifest, other;
    manifest_make(&dice, &manifest, 5);
    assert_int_equal(windrow_manifest_write(stores[0], &manifest), WINDROW_OK);
    assert_int_equal(windrow_manifest_read(stores[0], &other), WINDROW_OK);
    struct windrow_manifest_file file = other.files[0];
    other.files[0] = other.files[3];
    other.files[3] = file;
    other.facts.fingerprint = 0;
    assert_int_equal(windrow_manifest_write(stores[1], &other), WINDROW_OK);
    assert_true(other.facts.fingerprint == manifest.facts.fingerprint);
    other.blocks[WINDROW_BLOCK_RIM][3].checksum ^= 1;
    assert_int_equal(windrow_manifest_write(stores[1], &other), WINDROW_OK);
    assert_false(other.facts.fingerprint == manifest.facts.fingerprint);
    windrow_manifest_free(&manifest);
    windrow_manifest_free(&other);
    scratch_remove(stores[0]);
    scratch_remove(stores[1]);
}

static enum windrow_status status_of(const char *store)
{
    struct windrow_manifest manifest;
    enum windrow_status status = windrow_manifest_read(store, &manifest);
    if (!status)
        windrow_manifest_free(&manifest);
    return status;
}

static void test_damage(void **state)
{
    (void)state;
    struct dice dice = {63};
    char *store = scratch_make(), *seal = scratch_path(store, "seal"), *data = scratch_path(store, "manifest/data.mdb");
    struct windrow_manifest manifest;
    size_t bytes;
    assert_int_equal(status_of(store), WINDROW_NO); /* nothing is there yet */
    manifest_make(&dice, &manifest, 30);
    assert_int_equal(windrow_manifest_write(store, &manifest), WINDROW_OK);
    windrow_manifest_free(&manifest);
    char *good = scratch_read(seal, &bytes);
    for (size_t at = 0; at < bytes; at++) {
        scratch_damage(seal, at);
        assert_int_equal(status_of(store), WINDROW_DAMAGED);
        scratch_cut(seal, at);
        assert_int_equal(status_of(store), WINDROW_DAMAGED);
        scratch_write(seal, good, bytes);
    }
    assert_int_equal(remove(seal), 0);
    assert_int_equal(status_of(store), WINDROW_NO);
    char *large = memory_array(1 << 20, 1);
    memcpy(large, good, bytes);
    scratch_write(seal, large, 1 << 20);
    assert_int_equal(status_of(store), WINDROW_DAMAGED);
    free(large);
    scratch_write(seal, good, bytes);
    free(good);
    good = scratch_read(data, &bytes);
    for (size_t at = 0; at < bytes; at += 997) {
        scratch_damage(data, at);
        assert_int_equal(status_of(store), WINDROW_DAMAGED);
        scratch_damage(data, at);
    }
    scratch_cut(data, bytes - 4096);
    assert_int_equal(status_of(store), WINDROW_DAMAGED);
    scratch_write(data, good, bytes);
    assert_int_equal(status_of(store), WINDROW_OK);
    assert_int_equal(remove(data), 0);
    assert_int_equal(status_of(store), WINDROW_DAMAGED);
    free(good);
    free(data);
    free(seal);
    scratch_remove(store);
}

/* Writes a record into the manifest behind the library's back (NULL: takes it out), and seals what came of it. */
static void meddle(const char *store, const char *key, const void *value, size_t value_bytes, uint64_t fingerprint)
{
    char *directory = scratch_path(store, "manifest"), *data = scratch_path(store, "manifest/data.mdb"), *seal = scratch_path(store, "seal");
    MDB_env *environment;
    MDB_txn *transaction;
    MDB_dbi database;
    MDB_val lmdb_key = {strlen(key), (void *)key}, lmdb_value = {value_bytes, (void *)value};
    assert_int_equal(mdb_env_create(&environment), 0);
    assert_int_equal(mdb_env_open(environment, directory, MDB_NOLOCK, 0644), 0);
    assert_int_equal(mdb_txn_begin(environment, NULL, 0, &transaction), 0);
    assert_int_equal(mdb_dbi_open(transaction, NULL, 0, &database), 0);
    assert_int_equal(value ? mdb_put(transaction, database, &lmdb_key, &lmdb_value, 0) : mdb_del(transaction, database, &lmdb_key, NULL), 0);
    assert_int_equal(mdb_txn_commit(transaction), 0);
    mdb_env_close(environment);
    uint64_t bytes, checksum;
    assert_int_equal(windrow_file_checksum(data, &bytes, &checksum), WINDROW_OK);
    char *text = memory_text("windrow store, format %d\nmanifest %llu bytes, checksum %016llx\nfingerprint %016llx\n", WINDROW_FORMAT_VERSION,
                             (unsigned long long)bytes, (unsigned long long)checksum, (unsigned long long)fingerprint);
    scratch_write_text(seal, text);
    free(text);
    free(directory);
    free(data);
    free(seal);
}

static void test_meddled_records(void **state)
{
    (void)state;
    static const struct {
        const char *key, *value;
        size_t bytes;
    } cases[] = {
        {"facts", NULL, 0},                        /* taken out */
        {"block/rim/000000000004", NULL, 0},       /* the last one, which no numbering misses */
        {"library/zstd", NULL, 0},
        {"facts", "wrong", 5},                     /* too short for a checksum */
        {"facts", "wrong and with a wrong checksum", 31},
        {"unknown", "1234567812345678", 16},
    };
    for (size_t index = 0; index < sizeof cases / sizeof *cases; index++) {
        struct dice dice = {64};
        char *store = scratch_make();
        struct windrow_manifest manifest;
        manifest_make(&dice, &manifest, 5);
        assert_int_equal(windrow_manifest_write(store, &manifest), WINDROW_OK);
        meddle(store, cases[index].key, cases[index].value, cases[index].bytes, manifest.facts.fingerprint);
        if (status_of(store) != WINDROW_DAMAGED)
            fail_msg("case %zu: nobody notices", index);
        windrow_manifest_free(&manifest);
        scratch_remove(store);
    }
}

/* A store of another format is told apart from a damaged one. */
static void test_other_format(void **state)
{
    (void)state;
    struct dice dice = {65};
    char *store = scratch_make(), *seal = scratch_path(store, "seal");
    struct windrow_manifest manifest;
    manifest_make(&dice, &manifest, 1);
    assert_int_equal(windrow_manifest_write(store, &manifest), WINDROW_OK);
    windrow_manifest_free(&manifest);
    char *text = scratch_read(seal, NULL), *format = strstr(text, "format ");
    assert_non_null(format);
    format[7]++;
    scratch_write_text(seal, text);
    assert_int_equal(status_of(store), WINDROW_DAMAGED);
    assert_non_null(strstr(windrow_message(), "reads format"));
    free(text);
    free(seal);
    scratch_remove(store);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_round_trip),
        cmocka_unit_test(test_fingerprint),
        cmocka_unit_test(test_damage),
        cmocka_unit_test(test_meddled_records),
        cmocka_unit_test(test_other_format),
    };
    return cmocka_run_group_tests_name("manifest", tests, NULL, NULL);
}
