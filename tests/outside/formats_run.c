/* Formats and standards of others, through the built program: compressed dumps of every common kind,
 * the tools of zstd and LMDB on a store, and the URL standards. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "../common/memory.h"
#include "../common/program.h"
#include "../common/ranking.h"
#include "../common/scratch.h"

static int set_up(void **state)
{
    *state = scratch_make();
    return 0;
}

static int tear_down(void **state)
{
    scratch_remove(*state);
    return 0;
}

/* Runs a line of shell inside the test's directory. */
static void shell(const char *directory, const char *line)
{
    char *command = memory_text("set -euo pipefail; cd '%s'; %s", directory, line);
    MUST("bash", "-c", command);
    free(command);
}

/* ---- compression ---- */

static void test_compressed_dumps(void **state)
{
    static const struct {
        const char *what, *shell;
    } ways[] = {
        {"one gzip member", "gzip -c whole"},
        {"several gzip members: RFC 1952 section 2.2", "gzip -c a; gzip -9 -c b"},
        {"one zstd frame", "zstd -qc whole"},
        {"several zstd frames, a skippable one between: RFC 8878 section 3.1",
         "zstd -qc a; printf '\\x50\\x2a\\x4d\\x18\\x05\\0\\0\\0whole'; zstd -qc b"},
        {"a zstd window of 128 MiB", "cat whole | zstd -qc --long=27"},
        {"bzip2", "bzip2 -c a; bzip2 -c b"},
        {"xz", "xz -c whole"},
        {"lz4", "lz4 -qc whole"},
    };
    const char *directory = *state;
    char *whole = scratch_path(directory, "whole"), *plain = scratch_path(directory, "plain");
    struct dice dice = {21};
    struct graph graph = graph_random(&dice, GRAPH_SKEWED, 3000, 5);
    ranking_write_dump(whole, &graph, NAMING_FEW_HOSTS);
    shell(directory, "head -n 4000 whole >a; tail -n +4001 whole >b");
    MUST_WINDROW("shard", "--quiet", "--out", plain, whole);
    for (size_t i = 0; i < sizeof ways / sizeof *ways; i++) {
        char *line = memory_text("{ %s; } >compressed-%zu", ways[i].shell, i);
        char *dump = memory_text("%s/compressed-%zu", directory, i), *store = memory_text("%s/store-%zu", directory, i);
        shell(directory, line);
        struct outcome outcome = WINDROW("shard", "--quiet", "--out", store, dump);
        if (outcome.exit_code != 0)
            print_error("%s:\n", ways[i].what);
        outcome_expect(&outcome, 0);
        outcome_free(&outcome);
        scratch_expect_same_store(plain, store);
        free(line);
        free(dump);
        free(store);
    }
    graph_free(&graph);
    free(whole);
    free(plain);
}

/* A dump that ends in the middle of its compressed stream is not taken for a whole one. */
static void test_truncated_dumps(void **state)
{
    static const char *const packers[] = {"gzip -c", "zstd -qc", "xz -c"};
    const char *directory = *state;
    shell(directory, "for i in {1..5000}; do printf 'http://a.example/%d\\thttp://b.example/%d\\n' $i $((i * 7919 % 1000)); done >whole");
    char *dump = scratch_path(directory, "cut"), *store = scratch_path(directory, "store");
    for (int i = 0; i < 3; i++) {
        char *line = memory_text("%s whole >packed; head -c $(($(stat -c %%s packed) / 2)) packed >cut", packers[i]);
        shell(directory, line);
        struct outcome outcome = WINDROW("shard", "--quiet", "--out", store, dump);
        outcome_expect(&outcome, 3);
        outcome_expect_talk(&outcome, dump);
        outcome_free(&outcome);
        shell(directory, "rm -rf store");
        free(line);
    }
    free(dump);
    free(store);
}

/* ---- a store, read by the tools of the libraries that it is made with ---- */

static void test_store_by_other_tools(void **state)
{
    const char *directory = *state;
    char *dump = scratch_path(directory, "dump"), *store = scratch_path(directory, "store");
    size_t zstd_files = 0, environments = 0;
    struct dice dice = {22};
    struct graph graph = graph_random(&dice, GRAPH_EVEN, 2000, 5);
    ranking_write_dump(dump, &graph, NAMING_FEW_HOSTS);
    MUST_WINDROW("shard", "--quiet", "--out", store, dump);
    MUST_WINDROW("rank", "--quiet", store);
    struct scratch_listing listing = scratch_list(store);
    for (size_t i = 0; i < listing.count; i++) {
        char *path = scratch_path(store, listing.paths[i]);
        const char *suffix = strrchr(path, '.');
        if (suffix != NULL && strcmp(suffix, ".zst") == 0) {
            MUST("zstd", "-q", "-t", path);
            zstd_files++;
        }
        if (strcmp(strrchr(path, '/'), "/data.mdb") == 0) {
            *strrchr(path, '/') = '\0';
            MUST("mdb_stat", "-e", "-a", path);
            MUST("mdb_dump", path);
            environments++;
        }
        free(path);
    }
    assert_true(zstd_files >= 1);   /* blocks */
    assert_true(environments >= 2); /* manifest and ledger */
    scratch_listing_free(&listing);
    graph_free(&graph);
    free(dump);
    free(store);
}

/* ---- URLs ---- */

static const struct {
    const char *written, *normal;
} urls[] = {
    /* RFC 3986 section 6.2.2, with http in place of the example scheme */
    {"http://a/b/c/%7Bfoo%7D", "http://a/b/c/%7Bfoo%7D"},
    {"hTTP://a/./b/../b/%63/%7bfoo%7d", "http://a/b/c/%7Bfoo%7D"},
    /* section 6.2.3 */
    {"http://example.com", "http://example.com/"},
    {"http://example.com/", "http://example.com/"},
    {"http://example.com:/", "http://example.com/"},
    {"http://example.com:80/", "http://example.com/"},
    {"https://example.com:443", "https://example.com/"},
    {"https://example.com:80", "https://example.com:80/"},
    /* section 5.2.4 */
    {"http://a/a/b/c/./../../g", "http://a/a/g"},
    /* RFC 5891 and RFC 3492 */
    {"http://b\xc3\xbc" "cher.example/", "http://xn--bcher-kva.example/"},
    {"http://B\xc3\x9c" "CHER.example/", "http://xn--bcher-kva.example/"},
    /* RFC 3987 section 3.1 */
    {"http://a/\xc3\xa9", "http://a/%C3%A9"},
    {"http://a/%c3%a9", "http://a/%C3%A9"},
    /* RFC 3986 section 2.3: unreserved characters need no escape; section 2.2: reserved ones keep theirs */
    {"http://a/%7Euser?q=%2D%2F#part", "http://a/~user?q=-%2F"},
    /* choices of the README: user information goes, a trailing dot goes, a lone % is escaped */
    {"http://user:secret@a./x", "http://a/x"},
    {"  http://a/100%  ", "http://a/100%25"},
    {"http://a/x//y", "http://a/x//y"},
};
#define URL_COUNT (sizeof urls / sizeof *urls)

/* Each spelling, sharded and asked for, is the page in normal form. */
static void test_url_standards(void **state)
{
    const char *directory = *state;
    char *dump = scratch_path(directory, "dump"), *store = scratch_path(directory, "store");
    FILE *file = fopen(dump, "w");
    assert_non_null(file);
    for (size_t i = 0; i < URL_COUNT; i++)
        fprintf(file, "%s\n", urls[i].written);
    fclose(file);
    MUST_WINDROW("shard", "--quiet", "--out", store, dump);
    MUST_WINDROW("rank", "--quiet", store);
    struct ranking all = ranking_read(store, NULL);
    size_t distinct = 0;
    for (size_t i = 0; i < URL_COUNT; i++) {
        size_t earlier = 0;
        while (strcmp(urls[earlier].normal, urls[i].normal) != 0)
            earlier++;
        distinct += earlier == i;
        struct outcome outcome = WINDROW("score", store, urls[i].written);
        outcome_expect(&outcome, 0);
        struct ranking answer = ranking_parse(outcome.out);
        outcome.out = NULL;
        outcome_free(&outcome);
        assert_int_equal(answer.page_count, 1);
        assert_string_equal(answer.pages[0].url, urls[i].normal);
        ranking_free(&answer);
    }
    assert_int_equal(all.page_count, distinct);
    ranking_free(&all);
    free(dump);
    free(store);
}

/* What each line of a dump comes to, by the counts of `status`. */
static void test_odd_lines(void **state)
{
    const char *directory = *state;
    char *dump = scratch_path(directory, "dump"), *store = scratch_path(directory, "store");
    scratch_write_text(dump,
        "http://a.example/1\thttp://a.example/2\n"             /* kept */
        "http://a.example/1\thttp://a.example/2#again\n"       /* duplicate */
        "http://a.example/1\thttp://A.example:80/1\n"          /* self */
        "http://a.example/1\tmailto:someone@a.example\n"       /* scheme */
        "http://a.example/1\thttp://sp ace.example/\n"         /* malformed: a space in the host */
        "http://a.example/1\thttp:/one-slash\n"                /* malformed */
        "http://a.example/1\thttp://a.example:70000/\n"        /* malformed: a port over 65535 */
        "http://a.example/1\thttp://a..example/\n"             /* malformed: an empty inner label */
        "http://a.example/2\thttp://b.example/\tnofollow\n"    /* nofollow */
        "http://a.example/2\thttp://c.example/\tugc\n"         /* nofollow */
        "http://a.example/2\thttp://d.example/\tnofollow\n"    /* nofollow here … */
        "http://a.example/2\thttp://d.example/\n"              /* … and not here: kept */
        "http://a.example/3\n");                               /* fetched, no links */
    MUST_WINDROW("shard", "--quiet", "--shape", "pairs", "--bad-max", "0.5", "--out", store, dump);
    struct outcome outcome = WINDROW("status", "--json", store);
    outcome_expect(&outcome, 0);
    char *status = scratch_path(directory, "status");
    scratch_write(status, outcome.out, outcome.out_bytes);
    outcome_free(&outcome);
    outcome = RUN("jq", "-c", "[.pages, .crawled_pages, .dangling_pages, .links, .hosts, .core_pages, .core_links, .state, "
                  ".dropped.malformed, .dropped.scheme, .dropped.self, .dropped.duplicate]", status);
    outcome_expect(&outcome, 0);
    /* pages a/1, a/2, a/3, d; the core is a/1 and a/2 with one link between them */
    assert_string_equal(outcome.out, "[4,3,2,2,2,2,1,\"sharded\",4,1,1,1]\n");
    outcome_free(&outcome);
    free(status);
    free(dump);
    free(store);
}

/* Public Suffix List semantics through its library: a.b.co.uk belongs to b.co.uk. */
static void test_registered_domains(void **state)
{
    const char *directory = *state;
    char *dump = scratch_path(directory, "dump"), *store = scratch_path(directory, "store");
    scratch_write_text(dump, "http://a.b.co.uk/\thttp://c.b.co.uk/\thttp://d.co.uk/\thttp://x.y.example/\n");
    MUST_WINDROW("shard", "--quiet", "--shape", "lists", "--out", store, dump);
    MUST_WINDROW("rank", "--quiet", store);
    struct outcome outcome = WINDROW("top", "--per", "domain", "--count", "1", store);
    outcome_expect(&outcome, 0);
    scratch_write(dump, outcome.out, outcome.out_bytes);
    outcome_free(&outcome);
    outcome = RUN("cut", "-f", "1", dump);
    assert_string_equal(outcome.out, "domain\ny.example\nb.co.uk\nd.co.uk\n"); /* host order */
    outcome_free(&outcome);
    free(dump);
    free(store);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test_setup_teardown(test_compressed_dumps, set_up, tear_down),
        cmocka_unit_test_setup_teardown(test_truncated_dumps, set_up, tear_down),
        cmocka_unit_test_setup_teardown(test_store_by_other_tools, set_up, tear_down),
        cmocka_unit_test_setup_teardown(test_url_standards, set_up, tear_down),
        cmocka_unit_test_setup_teardown(test_odd_lines, set_up, tear_down),
        cmocka_unit_test_setup_teardown(test_registered_domains, set_up, tear_down),
    };
    return cmocka_run_group_tests_name("formats and standards of others", tests, NULL, NULL);
}
