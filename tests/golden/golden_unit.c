/* The golden store: made once by windrow from dump.tsv and aliases.tsv, and committed beside them with a listing of what is in
 * it. Today's windrow must read it as it was, and must make the same store from the same dump.
 *
 * A store's bytes depend on the versions of zstd, libidn2 and libpsl that its manifest names. So files are compared as they
 * are where nothing but windrow writes them, and compressed ones by what their frames hold; the fingerprint, which
 * covers compressed bytes, is compared when the libraries are those of the golden store.
 *
 * After a change of format, which is to be a decision and not an accident:
 *     rm -r tests/golden/store && build/tests/golden/golden_unit --write
 */
#include "store/inlinks.h"
#include "store/layout.h"

#include "../common/memory.h"
#include "../common/scratch.h"

#include <inttypes.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <zstd.h>

#include <cmocka.h>

static char *golden(const char *name)
{
    const char *slash = strrchr(__FILE__, '/');
    return memory_text("%.*s%s", slash ? (int)(slash - __FILE__) + 1 : 0, __FILE__, name);
}

static void make_store(const char *out)
{
    char *dump = golden("dump.tsv"), *aliases = golden("aliases.tsv");
    const char *const dumps[] = {dump};
    struct windrow_shard_options options;
    windrow_shard_defaults(&options);
    options.out = out;
    options.dumps = dumps;
    options.dump_count = 1;
    options.shape = WINDROW_SHAPE_LISTS;
    options.aliases = aliases;
    options.memory_bytes = UINT64_C(64) << 20;
    options.bad_max = 1;
    if (windrow_shard(&options, NULL))
        fail_msg("%s", windrow_message());
    free(dump);
    free(aliases);
}

/* ---- The listing ---- */

static void list_links(FILE *file, const struct windrow_store *store, enum windrow_block_kind kind)
{
    struct windrow_inlinks inlinks;
    windrow_inlinks_begin(&inlinks, store, kind, 0);
    while (!windrow_inlinks_next(&inlinks) && !inlinks.ended) {
        fprintf(file, "%s %" PRIu64 " from", kind == WINDROW_BLOCK_CORE ? "core" : "rim", inlinks.target);
        for (uint64_t index = 0; index < inlinks.count; index++)
            fprintf(file, " %" PRIu64, inlinks.sources[index]);
        fputs("\n", file);
    }
    assert_true(inlinks.ended);
    windrow_inlinks_end(&inlinks);
}

static enum windrow_status list_alias(void *context, const uint8_t *key, size_t key_bytes, uint64_t page)
{
    FILE *file = context;
    fputs("alias ", file);
    for (size_t at = 0; at < key_bytes; at++)
        fprintf(file, key[at] < 0x20 ? "\\%02x" : "%c", key[at]);
    fprintf(file, " of %" PRIu64 "\n", page);
    return WINDROW_OK;
}

/* All that a reader can see of a store, as text. */
static char *list_store(const char *path)
{
    struct windrow_store *store;
    struct windrow_page_reader *reader;
    char *text;
    size_t text_bytes;
    FILE *file = open_memstream(&text, &text_bytes);
    if (windrow_store_open(path, &store) || windrow_page_reader_create(store, &reader))
        fail_msg("%s", windrow_message());
    const struct windrow_store_facts *facts = windrow_store_facts(store);
    fprintf(file, "pages %" PRIu64 ", crawled %" PRIu64 ", core %" PRIu64 ", hosts %" PRIu64 ", links %" PRIu64 ", between core pages %" PRIu64 "\n",
            facts->pages, facts->crawled_pages, facts->core_pages, facts->hosts, facts->links, facts->core_links);
    for (uint64_t host = 0; host < facts->hosts; host++) {
        struct windrow_host found = windrow_store_host(store, host);
        fprintf(file, "host %.*s, domain of %u bytes, from page %" PRIu64 ", core %" PRIu64 "\n", (int)found.name_bytes, found.name,
                found.domain_bytes, found.first_page, found.first_core);
    }
    for (uint64_t page = 0; page < facts->pages; page++) {
        const char *url;
        size_t url_bytes;
        uint64_t number;
        if (windrow_page_reader_url(reader, page, &url, &url_bytes))
            fail_msg("%s", windrow_message());
        bool core = windrow_store_page_number(store, page, &number);
        fprintf(file, "%" PRIu64 " %.*s, %s %" PRIu64, page, (int)url_bytes, url, core ? "core" : "rim", number);
        if (core)
            fprintf(file, ", links %u, inside %u", windrow_store_degrees(store)[number], windrow_store_inside_degrees(store)[number]);
        fputs(windrow_store_page_crawled(store, page) ? "\n" : ", not crawled\n", file);
    }
    list_links(file, store, WINDROW_BLOCK_CORE);
    list_links(file, store, WINDROW_BLOCK_RIM);
    assert_int_equal(windrow_store_each_alias(store, list_alias, file), WINDROW_OK);
    windrow_page_reader_destroy(reader);
    windrow_store_close(store);
    fclose(file);
    return text;
}

static void expect_listing(const char *store)
{
    char *path = golden("contents.txt"), *expected = scratch_read(path, NULL), *found = list_store(store);
    assert_string_equal(found, expected);
    free(path);
    free(expected);
    free(found);
}

static void complain(void *context, const char *damage)
{
    (void)context;
    print_error("%s\n", damage);
}

/* ---- Tests ---- */

static void test_golden_store_is_read(void **state)
{
    (void)state;
    char *store = golden("store");
    expect_listing(store);
    assert_int_equal(windrow_store_verify(store, 1, complain, NULL, NULL), WINDROW_OK);
    free(store);
}

/* The contents of all frames of a file. */
static struct windrow_buffer unpack(const char *packed, size_t bytes)
{
    struct windrow_buffer out = {0};
    while (bytes) {
        size_t frame_bytes = ZSTD_findFrameCompressedSize(packed, bytes);
        assert_false(ZSTD_isError(frame_bytes));
        unsigned long long content = ZSTD_getFrameContentSize(packed, bytes);
        assert_true(content < 1 << 20);
        assert_int_equal(windrow_buffer_reserve(&out, (size_t)content), WINDROW_OK);
        assert_int_equal(ZSTD_decompress(out.data + out.bytes, (size_t)content, packed, frame_bytes), content);
        out.bytes += (size_t)content;
        packed += frame_bytes;
        bytes -= frame_bytes;
    }
    return out;
}

static void expect_same_file(const char *name, const char *path, const char *golden_path, bool same_libraries)
{
    size_t bytes, golden_bytes;
    char *found = scratch_read(path, &bytes), *expected = scratch_read(golden_path, &golden_bytes);
    if (strstr(name, ".zst")) {
        struct windrow_buffer contents = unpack(found, bytes), golden_contents = unpack(expected, golden_bytes);
        assert_int_equal(contents.bytes, golden_contents.bytes);
        if (contents.bytes)
            assert_memory_equal(contents.data, golden_contents.data, contents.bytes);
        windrow_buffer_free(&contents);
        windrow_buffer_free(&golden_contents);
    }
    if (!strstr(name, ".zst") || same_libraries) {
        if (bytes != golden_bytes || memcmp(found, expected, bytes) != 0)
            fail_msg("%s is not what it was", name);
    }
    free(found);
    free(expected);
}

static void test_golden_store_is_made(void **state)
{
    (void)state;
    char *directory = scratch_make(), *store = scratch_path(directory, "store"), *golden_store = golden("store");
    struct windrow_manifest manifest, golden_manifest;
    make_store(store);
    expect_listing(store);
    assert_int_equal(windrow_manifest_read(store, &manifest), WINDROW_OK);
    assert_int_equal(windrow_manifest_read(golden_store, &golden_manifest), WINDROW_OK);
    bool same_zstd = strcmp(manifest.zstd_library, golden_manifest.zstd_library) == 0;
    bool same_libraries = same_zstd && strcmp(manifest.domain_library, golden_manifest.domain_library) == 0 &&
                          strcmp(manifest.idn_library, golden_manifest.idn_library) == 0;
    assert_int_equal(manifest.file_count, golden_manifest.file_count);
    for (size_t index = 0; index < manifest.file_count; index++) {
        const char *name = manifest.files[index].name;
        char *path = scratch_path(store, name), *golden_path = scratch_path(golden_store, name);
        assert_non_null(windrow_manifest_file(&golden_manifest, name));
        expect_same_file(name, path, golden_path, same_zstd);
        free(path);
        free(golden_path);
    }
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++) {
        assert_int_equal(manifest.block_counts[kind], golden_manifest.block_counts[kind]);
        for (uint64_t block = 0; block < manifest.block_counts[kind]; block++) {
            const struct windrow_block_record *record = &manifest.blocks[kind][block], *expected = &golden_manifest.blocks[kind][block];
            assert_true(record->first_target == expected->first_target && record->target_count == expected->target_count &&
                        record->link_count == expected->link_count && record->segment == expected->segment &&
                        record->payload_bytes == expected->payload_bytes && record->flags == expected->flags);
        }
    }
    if (same_libraries)
        assert_true(manifest.facts.fingerprint == golden_manifest.facts.fingerprint);
    windrow_manifest_free(&manifest);
    windrow_manifest_free(&golden_manifest);
    free(golden_store);
    free(store);
    scratch_remove(directory);
}

/* Makes the golden store and its listing anew, without the job's own files. */
static void test_write(void **state)
{
    (void)state;
    char *store = golden("store"), *ledger = scratch_path(store, "ledger"), *contents = golden("contents.txt");
    make_store(store);
    assert_int_equal(windrow_directory_remove(ledger), WINDROW_OK);
    char *text = list_store(store);
    scratch_write_text(contents, text);
    free(text);
    free(store);
    free(ledger);
    free(contents);
}

int main(int argc, char **argv)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_golden_store_is_read),
        cmocka_unit_test(test_golden_store_is_made),
    };
    const struct CMUnitTest write[] = {cmocka_unit_test(test_write)};
    if (argc == 2 && strcmp(argv[1], "--write") == 0)
        return cmocka_run_group_tests_name("writing", write, NULL, NULL);
    return cmocka_run_group_tests_name("golden", tests, NULL, NULL);
}
