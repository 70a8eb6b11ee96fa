/* Verification names what is damaged, goes on, and notices parts that contradict each other though all checksums are right. */
#include "store/store.h"

#include "store/layout.h"
#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

/* ---- A store to damage ---- */

static char *directory, *store, *copy;

static int set_up(void **state)
{
    (void)state;
    struct dice dice = {81};
    directory = scratch_make();
    store = scratch_path(directory, "store");
    copy = scratch_path(directory, "copy");
    char *dump = scratch_path(directory, "dump"), *aliases = scratch_path(directory, "aliases");
    FILE *file = fopen(dump, "w");
    for (unsigned source = 0; source < 300; source++) {
        fprintf(file, "http://h%u.example/%u", source % 7, source);
        for (unsigned left = dice_below(&dice, 12); left; left--) {
            unsigned target = dice_below(&dice, 600);
            fprintf(file, "\thttp://h%u.example/%u", target % 9, target);
        }
        fputs("\n", file);
    }
    fclose(file);
    file = fopen(aliases, "w");
    for (unsigned from = 0; from < 20; from++)
        fprintf(file, "http://old.example/%u\thttp://h0.example/%u\n", from, from * 7);
    fclose(file);
    const char *const dumps[] = {dump};
    struct windrow_shard_options options;
    windrow_shard_defaults(&options);
    options.out = store;
    options.dumps = dumps;
    options.dump_count = 1;
    options.shape = WINDROW_SHAPE_LISTS;
    options.aliases = aliases;
    options.memory_bytes = UINT64_C(64) << 20;
    enum windrow_status status = windrow_shard(&options, NULL);
    free(dump);
    free(aliases);
    return status ? -1 : 0;
}

static int tear_down(void **state)
{
    (void)state;
    free(store);
    free(copy);
    scratch_remove(directory);
    return 0;
}

static void fresh_copy(void)
{
    windrow_directory_remove(copy);
    scratch_copy(store, copy);
}

/* ---- What verification says ---- */

struct answer {
    enum windrow_status status;
    unsigned lines;
    char *text; /* all lines */
};

static void collect(void *context, const char *damage)
{
    struct answer *answer = context;
    assert_null(strchr(damage, '\n'));
    char *more = memory_text("%s%s\n", answer->text ? answer->text : "", damage);
    free(answer->text);
    answer->text = more;
    answer->lines++;
}

static struct answer ask(unsigned threads)
{
    struct answer answer = {0};
    answer.status = windrow_store_verify(copy, threads, collect, &answer, NULL);
    if (!answer.text)
        answer.text = memory_text("%s", "");
    return answer;
}

/* Fails unless there is damage and one of its lines holds `word`; the lines are the same with other threads. */
static void expect_damage(const char *what, const char *word)
{
    struct answer answer = ask(1), other = ask(3);
    if (answer.status != WINDROW_NO || !answer.lines || !strstr(answer.text, word))
        fail_msg("%s: verification ends with %d and says nothing of \"%s\", but: %s", what, (int)answer.status, word, answer.text);
    assert_int_equal(other.status, answer.status);
    assert_string_equal(other.text, answer.text);
    free(answer.text);
    free(other.text);
}

static void test_good(void **state)
{
    (void)state;
    fresh_copy();
    for (unsigned threads = 1; threads < 4; threads++) {
        struct answer answer = ask(threads);
        assert_int_equal(answer.status, WINDROW_OK);
        assert_int_equal(answer.lines, 0);
        free(answer.text);
    }
}

static void test_no_store(void **state)
{
    (void)state;
    windrow_directory_remove(copy);
    struct answer answer = ask(1);
    assert_int_equal(answer.status, WINDROW_USAGE);
    assert_int_equal(answer.lines, 0);
    free(answer.text);
    fresh_copy();
    char *seal = scratch_path(copy, "seal");
    assert_int_equal(remove(seal), 0);
    free(seal);
    answer = ask(1);
    assert_int_equal(answer.status, WINDROW_NO); /* not finished, which is no damage */
    assert_int_equal(answer.lines, 0);
    free(answer.text);
}

static bool of_the_job(const char *path)
{
    return strncmp(path, "ledger/", 7) == 0;
}

static void test_every_file(void **state)
{
    (void)state;
    struct scratch_listing files = scratch_list(store);
    unsigned tried = 0;
    for (size_t index = 0; index < files.count; index++) {
        if (of_the_job(files.paths[index]))
            continue;
        tried++;
        fresh_copy();
        char *path = scratch_path(copy, files.paths[index]);
        if (files.file_bytes[index]) {
            scratch_damage(path, files.file_bytes[index] / 2);
            expect_damage(files.paths[index], path);
            scratch_damage(path, files.file_bytes[index] / 2);
            scratch_cut(path, files.file_bytes[index] - 1);
            expect_damage(files.paths[index], path);
        }
        if (strcmp(files.paths[index], "seal") != 0) {
            assert_int_equal(remove(path), 0);
            expect_damage(files.paths[index], path);
        }
        free(path);
    }
    assert_true(tried >= 15);
    scratch_listing_free(&files);
}

static void test_strays(void **state)
{
    (void)state;
    static const char *const names[] = {"links/000001.core.zst", "pages/note"};
    for (size_t index = 0; index < 2; index++) {
        fresh_copy();
        char *path = scratch_path(copy, names[index]);
        scratch_write_text(path, "x");
        expect_damage(names[index], path);
        free(path);
    }
}

/* Goes on after the first damage: frames and blocks are named by their places. */
static void test_places(void **state)
{
    (void)state;
    fresh_copy();
    char *pages = scratch_path(copy, "pages/000000.zst"), *links = scratch_path(copy, "links/000000.rim.zst");
    scratch_damage(pages, 40);
    scratch_damage(links, 40);
    struct answer answer = ask(2);
    assert_int_equal(answer.status, WINDROW_NO);
    assert_int_equal(answer.lines, 4);
    char *frame = memory_text("the frame at byte 0 of %s", pages), *block = memory_text("block 0 (%s, byte 0)", links);
    assert_non_null(strstr(answer.text, frame));
    assert_non_null(strstr(answer.text, block));
    free(frame);
    free(block);
    free(answer.text);
    free(pages);
    free(links);
}

/* ---- Lies: files that contradict each other, all under right checksums ---- */

/* Seals the copy again, with the checksums of what is there now; `change` may change the manifest. */
static void seal_again(void (*change)(struct windrow_manifest *manifest))
{
    struct windrow_manifest manifest;
    assert_int_equal(windrow_manifest_read(copy, &manifest), WINDROW_OK);
    for (size_t index = 0; index < manifest.file_count; index++) {
        char *path = scratch_path(copy, manifest.files[index].name);
        assert_int_equal(windrow_file_checksum(path, &manifest.files[index].bytes, &manifest.files[index].checksum), WINDROW_OK);
        free(path);
    }
    if (change)
        change(&manifest);
    assert_int_equal(windrow_manifest_write(copy, &manifest), WINDROW_OK);
    windrow_manifest_free(&manifest);
}

/* Adds to the number of `number_bytes` bytes at `offset` of a file. */
static void lie(const char *name, size_t offset, size_t number_bytes, uint64_t add, const char *word)
{
    fresh_copy();
    char *path = scratch_path(copy, name);
    size_t bytes;
    char *file = scratch_read(path, &bytes);
    uint64_t number = 0;
    assert_true(offset + number_bytes <= bytes);
    memcpy(&number, file + offset, number_bytes);
    number += add;
    memcpy(file + offset, &number, number_bytes);
    scratch_write(path, file, bytes);
    free(file);
    free(path);
    seal_again(NULL);
    char *what = memory_text("%s at byte %zu", name, offset);
    expect_damage(what, word);
    free(what);
}

static void test_lying_files(void **state)
{
    (void)state;
    size_t host = sizeof(struct windrow_host_record);
    lie("degrees", 0, 4, 1, "degrees says that core page 0");
    lie("degrees", 400, 4, (uint64_t)-1, "degrees says that core page 100");
    lie("inside-degrees", 40, 4, 1, "inside-degrees says that core page 10");
    lie("hosts", 2 * host, 8, 1, "is not of host");                  /* a host begins a page later */
    lie("hosts", 2 * host + 8, 8, 1, "begins with core page");
    lie("hosts", 2 * host + 28, 4, (uint64_t)-1, "registered domain");
    lie("host-names", 1, 1, 1, "is not of host");
    lie("core-map", 0, 8, 1, "core");                                /* the first rank */
    lie("core-map", sizeof(struct windrow_core_group), 8, 1, "the core map gives page 512");
    lie("core-map", 8, 1, 1, "core");                                /* a core page more or less */
    lie("core-map", 8 + WINDROW_CORE_GROUP_PAGES / 8, 8, 0x100, "crawled"); /* a crawled page more or less, or two */
    lie("page-index", 8, 8, 1, "damaged");                           /* a frame elsewhere */
    lie("alias-index", 8, 8, 1, "damaged");
    lie("page-keys", 3, 1, 1, "damaged");
}

static void more_links(struct windrow_manifest *manifest) { manifest->facts.links++; }
static void more_core_links(struct windrow_manifest *manifest) { manifest->facts.core_links--; }
static void more_crawled(struct windrow_manifest *manifest) { manifest->facts.crawled_pages++; }
static void more_key_bytes(struct windrow_manifest *manifest) { manifest->facts.key_bytes++; }
static void more_core_pages(struct windrow_manifest *manifest) { manifest->facts.core_pages++; manifest->facts.dangling_pages--; }
static void huge_payload(struct windrow_manifest *manifest) { manifest->blocks[0][0].payload_bytes = UINT32_MAX; }
static void huge_count(struct windrow_manifest *manifest) { manifest->blocks[1][0].link_count = UINT32_MAX; }
static void huge_host_count(struct windrow_manifest *manifest) { manifest->facts.hosts = UINT64_MAX; }
static void other_checksum(struct windrow_manifest *manifest) { manifest->blocks[0][0].checksum++; }
static void other_offset(struct windrow_manifest *manifest) { manifest->blocks[0][0].offset++; }
static void other_segment(struct windrow_manifest *manifest) { manifest->blocks[1][0].segment++; }
static void one_block_less(struct windrow_manifest *manifest) { manifest->block_counts[1]--; }

static void test_lying_manifest(void **state)
{
    (void)state;
    static const struct {
        void (*change)(struct windrow_manifest *manifest);
        const char *word;
    } cases[] = {
        {more_links, "links, but there are"},
        {more_core_links, "links between core pages, but there are"},
        {more_crawled, "crawled pages, but there are"},
        {more_key_bytes, "bytes of keys, but there are"},
        {more_core_pages, "contradict each other"},
        {huge_payload, "contradict each other"},
        {huge_count, "contradict each other"},
        {huge_host_count, "contradict each other"},
        {other_checksum, "block 0 ("},
        {other_offset, "block 0 "},
        {other_segment, "links/000001.rim.zst"},
        {one_block_less, "contradict each other"},
    };
    for (size_t index = 0; index < sizeof cases / sizeof *cases; index++) {
        fresh_copy();
        seal_again(cases[index].change);
        expect_damage("a lying manifest", cases[index].word);
    }
}

/* Very many damages are told up to a number, and counted beyond. */
static void test_many_damages(void **state)
{
    (void)state;
    fresh_copy();
    char *path = scratch_path(copy, "host-names");
    size_t bytes;
    char *names = scratch_read(path, &bytes);
    memset(names, 'x', bytes);
    scratch_write(path, names, bytes);
    seal_again(NULL);
    expect_damage("names of hosts", "is not of host 0");
    free(names);
    free(path);
}

/* ---- Stopping, sizes ---- */

static void test_stop(void **state)
{
    (void)state;
    fresh_copy();
    atomic_bool stop = true;
    struct windrow_watch watch = {.stop = &stop};
    struct answer answer = {0};
    assert_int_equal(windrow_store_verify(copy, 2, collect, &answer, &watch), WINDROW_STOPPED);
    assert_int_equal(answer.lines, 0);
}

static void test_sizes(void **state)
{
    (void)state;
    struct windrow_store *opened;
    struct windrow_store_sizes sizes;
    assert_int_equal(windrow_store_open(store, &opened), WINDROW_OK);
    assert_int_equal(windrow_store_sizes(opened, &sizes), WINDROW_OK);
    struct scratch_listing files = scratch_list(store);
    uint64_t all = 0, core = 0, rim = 0, pages = 0, degrees = 0, aliases = 0;
    for (size_t index = 0; index < files.count; index++) {
        if (of_the_job(files.paths[index]))
            continue;
        uint64_t bytes = files.file_bytes[index];
        all += bytes;
        core += strstr(files.paths[index], ".core.zst") ? bytes : 0;
        rim += strstr(files.paths[index], ".rim.zst") ? bytes : 0;
        pages += strncmp(files.paths[index], "pages/", 6) == 0 ? bytes : 0;
        degrees += strstr(files.paths[index], "degrees") ? bytes : 0;
        aliases += strstr(files.paths[index], "alias") ? bytes : 0;
    }
    assert_int_equal(sizes.all_bytes, all);
    assert_int_equal(sizes.core_link_bytes, core);
    assert_int_equal(sizes.rim_link_bytes, rim);
    assert_int_equal(sizes.page_bytes, pages);
    assert_int_equal(sizes.degree_bytes, degrees);
    assert_int_equal(sizes.alias_bytes, aliases);
    assert_int_equal(sizes.page_bytes + sizes.page_index_bytes + sizes.host_bytes + sizes.core_map_bytes + sizes.core_link_bytes +
                     sizes.rim_link_bytes + sizes.degree_bytes + sizes.alias_bytes + sizes.manifest_bytes, all);
    scratch_listing_free(&files);
    windrow_store_close(opened);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_good),          cmocka_unit_test(test_no_store), cmocka_unit_test(test_every_file), cmocka_unit_test(test_strays),
        cmocka_unit_test(test_places),        cmocka_unit_test(test_lying_files), cmocka_unit_test(test_lying_manifest),
        cmocka_unit_test(test_many_damages),  cmocka_unit_test(test_stop),     cmocka_unit_test(test_sizes),
    };
    return cmocka_run_group_tests_name("verify", tests, set_up, tear_down);
}
