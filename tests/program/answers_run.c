/* What programs read: the columns of `top` and `score`, the formats, the keys of `status --json`. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <jansson.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "../common/memory.h"
#include "../common/program.h"
#include "../common/ranking.h"
#include "../common/scratch.h"

struct room {
    char *directory;
    char *store;
};

static const char dump_text[] =
    "http://market.isle.example/\thttp://ferry.isle.example/\thttp://market.isle.example/fish\thttp://council.test/\n"
    "http://market.isle.example/fish\thttp://market.isle.example/\thttp://ferry.isle.example/timetable\n"
    "http://ferry.isle.example/\thttp://ferry.isle.example/timetable\thttp://council.test/\n"
    "http://ferry.isle.example/timetable\thttp://ferry.isle.example/\n"
    "http://council.test/\thttp://isle.example/\thttp://council.test/minutes\n"
    "http://isle.example/\thttp://ferry.isle.example/\thttps://isle.example/secure\n";
#define PAGES 8
#define HOSTS 4

static int set_up(void **state)
{
    struct room *room = memory_array(1, sizeof *room);
    room->directory = scratch_make();
    room->store = scratch_path(room->directory, "store");
    char *dump = scratch_path(room->directory, "dump.tsv");
    scratch_write_text(dump, dump_text);
    MUST_WINDROW("shard", "--quiet", "--shape", "lists", "--out", room->store, dump);
    MUST_WINDROW("rank", "--quiet", "--digits", "10", room->store);
    free(dump);
    *state = room;
    return 0;
}

static int tear_down(void **state)
{
    struct room *room = *state;
    free(room->store);
    scratch_remove(room->directory);
    free(room);
    return 0;
}

static char *output(const char *const *arguments)
{
    struct outcome outcome = program_run(NULL, arguments);
    outcome_expect(&outcome, 0);
    char *text = outcome.out;
    outcome.out = NULL;
    outcome_free(&outcome);
    return text;
}
#define OUTPUT(...) output(ARGUMENTS("windrow", __VA_ARGS__))

/* A table as lines of TAB-separated fields; the strings point into the text. */
struct table {
    char *text;
    char *fields[64][8];
    size_t rows;
};

static struct table table_read(char *text)
{
    struct table table = {.text = text};
    for (char *line; (line = strsep(&text, "\n")) != NULL && text != NULL;) {
        assert_true(table.rows < 64);
        for (size_t field = 0; field < 8 && line != NULL; field++)
            table.fields[table.rows][field] = strsep(&line, "\t");
        table.rows++;
    }
    return table;
}

static void expect_header(const struct table *table, const char *const *names)
{
    assert_true(table->rows > 0);
    for (size_t i = 0; names[i] != NULL; i++)
        assert_string_equal(table->fields[0][i], names[i]);
}

/* Columns place, range, score, mean_multiple from `first` on: places 1, 2, 3 … in each group, scores
 * falling, equal ones in host order, ten proven digits leave no doubt about places of a small web but for ties. */
static void expect_rows(const struct table *table, size_t first, uint64_t longest_group)
{
    uint64_t place = 0;
    double before = INFINITY;
    for (size_t row = 1; row < table->rows; row++) {
        char *const *fields = table->fields[row];
        if (first == 1 && row > 1 && strcmp(fields[0], table->fields[row - 1][0]) != 0) {
            place = 0;
            before = INFINITY;
        }
        double score = atof(fields[first + 2]);
        assert_int_equal(strtoull(fields[first], NULL, 10), ++place);
        assert_true(place <= longest_group);
        assert_true(score > 0 && score <= before);
        assert_true(fabs(atof(fields[first + 3]) - score * PAGES) < 1e-12);
        uint64_t range_first, range_last;
        int numbers = sscanf(fields[first + 1], "%ju-%ju", &range_first, &range_last);
        assert_true(numbers >= 1 && range_first <= place && (numbers == 1 ? range_first : range_last) >= place);
        before = score;
    }
}

static void test_top_of_all(void **state)
{
    const struct room *room = *state;
    struct table table = table_read(OUTPUT("top", room->store));
    expect_header(&table, ARGUMENTS("place", "range", "score", "mean_multiple", "url"));
    assert_int_equal(table.rows, 1 + PAGES); /* fewer pages than the default of ten */
    expect_rows(&table, 0, 10);
    assert_string_equal(table.fields[1][4], "http://ferry.isle.example/");
    free(table.text);
    table = table_read(OUTPUT("top", "--count", "3", "--per", "all", room->store));
    assert_int_equal(table.rows, 1 + 3);
    free(table.text);
}

static void test_top_per_host(void **state)
{
    static const char *const hosts[] = {"isle.example", "ferry.isle.example", "market.isle.example", "council.test"};
    const struct room *room = *state;
    struct table table = table_read(OUTPUT("top", "--per", "host", "--count", "1", room->store));
    expect_header(&table, ARGUMENTS("host", "place", "range", "score", "mean_multiple", "url"));
    assert_int_equal(table.rows, 1 + HOSTS);
    for (size_t host = 0; host < HOSTS; host++) { /* host order, and every row's page is of its host */
        assert_string_equal(table.fields[1 + host][0], hosts[host]);
        assert_int_equal(strncmp(strstr(table.fields[1 + host][5], "//") + 2, hosts[host], strlen(hosts[host])), 0);
    }
    free(table.text);
    table = table_read(OUTPUT("top", "--per", "host", "--count", "5", room->store));
    assert_int_equal(table.rows, 1 + PAGES);
    expect_rows(&table, 1, 2);
    free(table.text);
}

static void test_top_per_domain(void **state)
{
    const struct room *room = *state;
    struct table table = table_read(OUTPUT("top", "--per", "domain", "--count", "2", room->store));
    expect_header(&table, ARGUMENTS("domain", "place", "range", "score", "mean_multiple", "url"));
    assert_int_equal(table.rows, 1 + 4);
    expect_rows(&table, 1, 2);
    assert_string_equal(table.fields[1][0], "isle.example");
    assert_string_equal(table.fields[3][0], "council.test");
    free(table.text);
}

/* 17 significant digits name a double exactly: the text read and printed again is the text. */
static void test_score_digits(void **state)
{
    const struct room *room = *state;
    struct ranking ranking = ranking_read(room->store, NULL);
    assert_int_equal(ranking.page_count, PAGES);
    struct table table = table_read(OUTPUT("score", "--all", room->store));
    for (size_t row = 1; row < table.rows; row++) {
        char again[32];
        double score = strtod(table.fields[row][3], NULL);
        snprintf(again, sizeof again, "%.17g", score);
        assert_true(strtod(again, NULL) == score);
        size_t digits = 0;
        for (const char *c = table.fields[row][3]; *c != '\0' && *c != 'e'; c++)
            digits += (*c >= '1' && *c <= '9') || (*c == '0' && digits > 0);
        assert_true(digits <= 17);
        assert_true(digits >= 12); /* trailing zeros may go, ten proven digits may not */
    }
    free(table.text);
    ranking_free(&ranking);
}

/* Places of `score --all` are those of `top`, pages come in host order. */
static void test_score_and_top_agree(void **state)
{
    const struct room *room = *state;
    struct ranking ranking = ranking_read(room->store, NULL);
    struct table top = table_read(OUTPUT("top", room->store));
    assert_string_equal(ranking.pages[0].url, "http://isle.example/");
    assert_string_equal(ranking.pages[1].url, "https://isle.example/secure");
    assert_string_equal(ranking.pages[PAGES - 1].url, "http://council.test/minutes");
    for (size_t i = 0; i < ranking.page_count; i++) {
        const struct ranked_page *page = &ranking.pages[i];
        assert_true(page->place >= 1 && page->place <= PAGES);
        assert_string_equal(top.fields[page->place][4], page->url);
        assert_true(strtod(top.fields[page->place][2], NULL) == page->score);
    }
    free(top.text);
    ranking_free(&ranking);
}

/* Asked page by page, in the order asked, from the command line or standard input. */
static void test_score_of_named_pages(void **state)
{
    const struct room *room = *state;
    char *questions = scratch_path(room->directory, "questions");
    scratch_write_text(questions, "http://council.test/minutes\nHTTP://Isle.example:80\n");
    char *named = OUTPUT("score", room->store, "http://council.test/minutes", "HTTP://Isle.example:80");
    struct outcome outcome = WINDROW_FROM(questions, "score", room->store);
    outcome_expect(&outcome, 0);
    assert_string_equal(outcome.out, named);
    outcome_free(&outcome);
    struct ranking ranking = ranking_parse(named);
    assert_int_equal(ranking.page_count, 2);
    assert_string_equal(ranking.pages[0].url, "http://council.test/minutes");
    assert_string_equal(ranking.pages[1].url, "http://isle.example/");
    ranking_free(&ranking);
    free(questions);
}

static void test_formats(void **state)
{
    const struct room *room = *state;
    char *csv = OUTPUT("top", "--format", "csv", "--per", "host", room->store);
    assert_int_equal(strncmp(csv, "host,place,range,score,mean_multiple,url", 40), 0);
    free(csv);
    char *lines = OUTPUT("top", "--format", "jsonl", "--per", "host", room->store), *rest = lines, *line;
    size_t objects = 0;
    while ((line = strsep(&rest, "\n")) != NULL && rest != NULL) {
        json_t *object = json_loads(line, 0, NULL);
        assert_non_null(object);
        assert_true(json_is_string(json_object_get(object, "host")));
        assert_true(json_is_integer(json_object_get(object, "place")));
        assert_true(json_is_string(json_object_get(object, "range")));
        assert_true(json_is_real(json_object_get(object, "score")));
        assert_true(json_is_number(json_object_get(object, "mean_multiple")));
        assert_true(json_is_string(json_object_get(object, "url")));
        json_decref(object);
        objects++;
    }
    assert_int_equal(objects, PAGES);
    free(lines);
}

static void test_output_files(void **state)
{
    static const char *const files[][3] = {
        {"top.tsv", "cat", "-"}, {"top.tsv.gz", "gzip", "-dc"}, {"top.tsv.zst", "zstd", "-dcq"},
    };
    const struct room *room = *state;
    char *expected = OUTPUT("top", room->store);
    for (int i = 0; i < 3; i++) {
        char *path = scratch_path(room->directory, files[i][0]);
        MUST_WINDROW("top", "--out", path, room->store);
        struct outcome outcome = program_run(path, ARGUMENTS(files[i][1], files[i][2]));
        outcome_expect(&outcome, 0);
        assert_string_equal(outcome.out, expected);
        outcome_free(&outcome);
        free(path);
    }
    free(expected);
}

static void test_status_keys(void **state)
{
    static const char *const numbers[] = {
        "pages", "crawled_pages", "dangling_pages", "links", "hosts", "core_pages", "core_links", "sweeps",
        "link_visits", "error_l1", "alpha", "rho", "digits", "elapsed_seconds", "seconds_left",
        "peak_memory_bytes", "store_bytes", "link_bits",
    };
    static const struct {
        const char *key;
        int expected;
    } counts[] = {
        {"pages", PAGES}, {"crawled_pages", 6}, {"dangling_pages", 2}, {"links", 12}, {"hosts", HOSTS},
        {"core_pages", 6}, {"core_links", 10},
    };
    static const char *const reasons[] = {"malformed", "scheme", "nofollow", "self", "duplicate"};
    const struct room *room = *state;
    char *text = OUTPUT("status", "--json", room->store);
    json_t *status = json_loads(text, 0, NULL);
    assert_non_null(status);
    assert_string_equal(json_string_value(json_object_get(status, "state")), "finished");
    for (size_t i = 0; i < sizeof numbers / sizeof *numbers; i++)
        if (!json_is_number(json_object_get(status, numbers[i])))
            fail_msg("there is no number \"%s\"", numbers[i]);
    for (size_t i = 0; i < sizeof counts / sizeof *counts; i++)
        assert_int_equal(json_integer_value(json_object_get(status, counts[i].key)), counts[i].expected);
    for (size_t i = 0; i < 5; i++)
        assert_int_equal(json_integer_value(json_object_get(json_object_get(status, "dropped"), reasons[i])), 0);
    assert_true(json_integer_value(json_object_get(status, "sweeps")) > 0);
    assert_true(json_integer_value(json_object_get(status, "link_visits")) >= 10);
    assert_true(json_number_value(json_object_get(status, "digits")) >= 10);
    assert_true(json_integer_value(json_object_get(status, "peak_memory_bytes")) > 100000);
    json_decref(status);
    free(text);
}

/* Folded pages: links to and from an alias are its target's; `score` still answers for the alias. */
static void test_aliases(void **state)
{
    const struct room *room = *state;
    char *dump = scratch_path(room->directory, "aliased.tsv"), *aliases = scratch_path(room->directory, "aliases.tsv");
    char *aliased = scratch_path(room->directory, "aliased"), *plain = scratch_path(room->directory, "plain");
    char *plain_dump = scratch_path(room->directory, "plain.tsv");
    scratch_write_text(dump, "http://a.example/old\thttp://a.example/2\thttp://a.example/new\n"
                             "http://a.example/2\thttp://a.example/older\n"
                             "http://a.example/new\thttp://a.example/3\n");
    scratch_write_text(aliases, "http://a.example/old\thttp://a.example/new\n"
                                "http://a.example/older\thttp://a.example/old\n");
    scratch_write_text(plain_dump, "http://a.example/new\thttp://a.example/2\thttp://a.example/3\n"
                                   "http://a.example/2\thttp://a.example/new\n");
    MUST_WINDROW("shard", "--quiet", "--shape", "lists", "--aliases", aliases, "--out", aliased, dump);
    MUST_WINDROW("shard", "--quiet", "--shape", "lists", "--out", plain, plain_dump);
    MUST_WINDROW("rank", "--quiet", aliased);
    MUST_WINDROW("rank", "--quiet", plain);
    char *a = OUTPUT("score", "--all", aliased), *b = OUTPUT("score", "--all", plain);
    assert_string_equal(a, b);
    struct ranking answer = ranking_parse(OUTPUT("score", aliased, "http://a.example/older"));
    assert_int_equal(answer.page_count, 1);
    assert_string_equal(answer.pages[0].url, "http://a.example/new");
    ranking_free(&answer);
    free(a);
    free(b);
    free(dump);
    free(aliases);
    free(aliased);
    free(plain);
    free(plain_dump);
}

/* Both kinds of stopping can be asked for; both together must both hold. */
static void test_error_and_digits(void **state)
{
    const struct room *room = *state;
    MUST_WINDROW("rank", "--quiet", "--run", "loose", "--error", "1e-2", room->store);
    struct certificate loose = certificate_read(room->store, "loose");
    assert_true(loose.error_l1 <= 1e-2);
    MUST_WINDROW("rank", "--quiet", "--run", "both", "--error", "1e-2", "--digits", "8", room->store);
    struct certificate both = certificate_read(room->store, "both");
    assert_true(both.error_l1 <= 1e-2 && both.digits >= 8);
    MUST_WINDROW("rank", "--quiet", "--run", "plain", "--method", "power", "--digits", "9", room->store);
    struct certificate power = certificate_read(room->store, "plain");
    assert_true(power.digits >= 9);
    struct ranking a = ranking_read(room->store, "plain"), b = ranking_read(room->store, NULL);
    for (size_t i = 0; i < PAGES; i++)
        assert_true(fabs(a.pages[i].score - b.pages[i].score) <= 2e-9 * b.pages[i].score);
    ranking_free(&a);
    ranking_free(&b);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_top_of_all),
        cmocka_unit_test(test_top_per_host),
        cmocka_unit_test(test_top_per_domain),
        cmocka_unit_test(test_score_digits),
        cmocka_unit_test(test_score_and_top_agree),
        cmocka_unit_test(test_score_of_named_pages),
        cmocka_unit_test(test_formats),
        cmocka_unit_test(test_output_files),
        cmocka_unit_test(test_status_keys),
        cmocka_unit_test(test_aliases),
        cmocka_unit_test(test_error_and_digits),
    };
    return cmocka_run_group_tests_name("answers", tests, set_up, tear_down);
}
