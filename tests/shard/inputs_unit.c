/* What may be fed to a shard job: dumps in several shapes and places, names, takedowns, and odd lines. */
#include "base/file.h"
#include "store/store.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>

#include <cmocka.h>

static char *directory;
static unsigned store_number;

static char *file_write(const char *name, const char *text)
{
    char *path = scratch_path(directory, name);
    scratch_write_text(path, text);
    return path;
}

static struct windrow_shard_options options_for(const char *const *dumps, size_t dump_count)
{
    struct windrow_shard_options options;
    windrow_shard_defaults(&options);
    options.dumps = dumps;
    options.dump_count = dump_count;
    options.memory_bytes = UINT64_C(64) << 20;
    options.threads = 2;
    options.bad_max = 1;
    return options;
}

/* A store's pages, an asterisk behind the crawled ones, and its links and fingerprint. */
struct facts {
    char *pages;
    uint64_t links, fingerprint;
};

static struct facts facts_read(const char *path)
{
    struct facts facts;
    struct windrow_store *store;
    struct windrow_page_reader *reader;
    struct windrow_buffer text = {0};
    if (windrow_store_open(path, &store) != WINDROW_OK)
        fail_msg("%s", windrow_message());
    assert_int_equal(windrow_page_reader_create(store, &reader), WINDROW_OK);
    for (uint64_t page = 0; page < windrow_store_facts(store)->pages; page++) {
        const char *url;
        size_t bytes;
        assert_int_equal(windrow_page_reader_url(reader, page, &url, &bytes), WINDROW_OK);
        windrow_buffer_append(&text, url, bytes);
        if (windrow_store_page_crawled(store, page))
            windrow_buffer_append(&text, "*", 1);
        windrow_buffer_append(&text, " ", 1);
    }
    windrow_buffer_append(&text, "", 1);
    facts = (struct facts){(char *)text.data, windrow_store_facts(store)->links, windrow_store_facts(store)->fingerprint};
    windrow_page_reader_destroy(reader);
    windrow_store_close(store);
    return facts;
}

/* Shards into a new store; its path is the caller's. */
static char *shard(struct windrow_shard_options options)
{
    char name[32];
    sprintf(name, "store-%u", store_number++);
    char *path = scratch_path(directory, name);
    options.out = path;
    if (windrow_shard(&options, NULL) != WINDROW_OK)
        fail_msg("%s", windrow_message());
    return path;
}

static struct facts shard_facts(struct windrow_shard_options options)
{
    char *path = shard(options);
    struct facts facts = facts_read(path);
    free(path);
    return facts;
}

static void check_pages(struct windrow_shard_options options, const char *pages, uint64_t links)
{
    struct facts facts = shard_facts(options);
    assert_string_equal(facts.pages, pages);
    assert_int_equal(facts.links, links);
    free(facts.pages);
}

static enum windrow_status status_of(struct windrow_shard_options options)
{
    char *path = scratch_path(directory, "refused");
    options.out = path;
    enum windrow_status status = windrow_shard(&options, NULL);
    windrow_directory_remove(path);
    free(path);
    return status;
}

static void ids_make_the_store_of_their_names(void **state)
{
    (void)state;
    char *ids = file_write("ids", "7 300\n300\t7 9\n9\n12 7\n"), *names = file_write("names", "300\texample.north\n12\texample.south.www\n7\texample.north.www\n9\texample.east\n");
    char *urls = file_write("urls", "http://www.north.example/\thttp://north.example/\nhttp://north.example\thttp://www.north.example/\thttp://east.example\n"
                                    "http://east.example/\nhttp://www.south.example\thttp://www.north.example/\n");
    const char *both[] = {ids, urls};
    struct windrow_shard_options options = options_for(both + 1, 1);
    struct facts expected = shard_facts(options);
    options.dumps = both;
    options.names = names;
    struct facts facts = shard_facts(options);
    assert_string_equal(facts.pages, expected.pages);
    assert_int_equal(facts.links, 4);
    assert_true(facts.fingerprint == expected.fingerprint);
    free(facts.pages);
    /* Several shapes in one call. */
    options.dump_count = 2;
    facts = shard_facts(options);
    assert_true(facts.fingerprint == expected.fingerprint);
    free(facts.pages);
    free(expected.pages);
    options.names = NULL;
    assert_int_equal(status_of(options), WINDROW_USAGE);
    assert_non_null(strstr(windrow_message(), "--names"));
    free(ids);
    free(names);
    free(urls);
}

static void ids_without_a_name_are_malformed(void **state)
{
    (void)state;
    char *ids = file_write("ids", "1 2\n\n1 3 4\n5 1\n"), *names = file_write("names", "1\ta.example\n2\tb.example\n4\tftp://x/\n");
    const char *dumps[] = {ids};
    struct windrow_shard_options options = options_for(dumps, 1);
    options.names = names;
    char *store = shard(options), *log_path = scratch_path(store, "ledger/malformed.tsv");
    struct facts facts = facts_read(store);
    assert_string_equal(facts.pages, "http://a.example/* http://b.example/ ");
    assert_int_equal(facts.links, 1);
    char *log = scratch_read(log_path, NULL), *expected = memory_text("%s\t3\tid without a name\t3\n", ids);
    assert_non_null(strstr(log, expected));
    free(expected);
    expected = memory_text("%s\t4\tid without a name\t5\n", ids);
    assert_non_null(strstr(log, expected));
    struct windrow_standing standing;
    assert_int_equal(windrow_standing_read(store, NULL, &standing), WINDROW_OK);
    assert_int_equal(standing.dropped[WINDROW_DROP_MALFORMED], 2);
    assert_int_equal(standing.dropped[WINDROW_DROP_SCHEME], 1);
    /* Two of seven fields. */
    options.bad_max = 0.28;
    assert_int_equal(status_of(options), WINDROW_INPUT);
    options.bad_max = 0.29;
    assert_int_equal(status_of(options), WINDROW_OK);
    free(facts.pages);
    free(expected);
    free(log);
    free(log_path);
    free(store);
    free(ids);
    free(names);
}

static void directories_and_lists_stand_for_their_files(void **state)
{
    (void)state;
    char *in = scratch_path(directory, "in"), *list = scratch_path(directory, "list"), *missing = scratch_path(directory, "in/missing");
    assert_int_equal(mkdir(in, 0777), 0);
    char *b = file_write("in/b", "http://a.example/\thttp://b.example/\n"), *a = file_write("in/a", "http://c.example/\thttp://a.example/\thttp://b.example/\n");
    const char *files[] = {a, b}, *named[] = {in}, *listed[] = {NULL};
    struct facts expected = shard_facts(options_for(files, 2));
    struct facts facts = shard_facts(options_for(named, 1));
    assert_true(facts.fingerprint == expected.fingerprint);
    assert_int_equal(facts.links, 3);
    free(facts.pages);
    char *text = memory_text("%s\n%s\n", a, b), *at_list = memory_text("@%s", list);
    scratch_write_text(list, text);
    listed[0] = at_list;
    /* A job begun with a directory is the same job when its files are named. */
    char *store = scratch_path(directory, "same-job");
    struct windrow_shard_options options = options_for(listed, 1);
    options.out = store;
    bool already_done;
    assert_int_equal(windrow_shard(&options, &already_done), WINDROW_OK);
    options.dumps = named;
    assert_int_equal(windrow_shard(&options, &already_done), WINDROW_OK);
    assert_true(already_done);
    facts = facts_read(store);
    assert_true(facts.fingerprint == expected.fingerprint);
    free(facts.pages);
    free(text);
    text = memory_text("%s\n", missing);
    scratch_write_text(list, text);
    assert_int_equal(status_of(options_for(listed, 1)), WINDROW_INPUT);
    assert_non_null(strstr(windrow_message(), missing));
    free(expected.pages);
    free(store);
    free(text);
    free(at_list);
    free(a);
    free(b);
    free(in);
    free(list);
    free(missing);
}

static void takedowns_are_as_if_they_had_never_been(void **state)
{
    (void)state;
    char *dump = file_write("dump", "http://a.example/1\thttp://b.example/1\thttp://c.example/1\thttp://www.b.example/1\nhttp://b.example/1\thttp://only-from-b.example/\n"
                                    "http://c.example/2\thttp://a.example/1\thttp://c.example/1\n");
    char *drop = file_write("drop", "b.example\nhttp://c.example/1\n"), *aliases = file_write("aliases", "http://a.example/1\thttp://b.example/7\n");
    const char *dumps[] = {dump};
    struct windrow_shard_options options = options_for(dumps, 1);
    options.drop = drop;
    char *store = shard(options);
    struct facts facts = facts_read(store);
    assert_string_equal(facts.pages, "http://a.example/1* http://www.b.example/1 http://c.example/2* ");
    assert_int_equal(facts.links, 2);
    struct windrow_standing standing;
    assert_int_equal(windrow_standing_read(store, NULL, &standing), WINDROW_OK);
    assert_int_equal(standing.dropped[WINDROW_DROP_TAKEDOWN], 4);
    free(facts.pages);
    /* An alias may lead to what is to go. */
    options.aliases = aliases;
    check_pages(options, "http://c.example/2* ", 0);
    /* Other takedowns are another job. */
    options.aliases = NULL;
    options.out = store;
    scratch_write_text(drop, "http://c.example/1\nb.example\n");
    assert_int_equal(windrow_shard(&options, NULL), WINDROW_OK);
    scratch_write_text(drop, "http://c.example/1\n");
    assert_int_equal(windrow_shard(&options, NULL), WINDROW_USAGE);
    assert_non_null(strstr(windrow_message(), "--drop"));
    scratch_write_text(drop, "no host\n");
    assert_int_equal(status_of(options), WINDROW_INPUT);
    /* Nothing may be left at all. */
    scratch_write_text(drop, "a.example\nb.example\nc.example\nwww.b.example\n");
    check_pages(options, "", 0);
    free(dump);
    free(drop);
    free(aliases);
    free(store);
}

static void odd_lines_lose_nothing_else(void **state)
{
    (void)state;
    char *long_path = memory_array(7001, 1), *too_long = memory_array(70001, 1);
    memset(long_path, 'p', 7000);
    memset(too_long, 'q', 70000);
    char *text = memory_text("http://a b.example/\thttp://never.example/\n" /* a space in a source's host: the whole line */
                             "http://a.example/\thttp://b c.example/\thttp://http://b.example/\thttp://b.example/x\\y\tmailto:x@b.example\t\t\n"
                             "http://c.example/\tjavascript:void(0)\thttp:/one-slash\t#top\n" /* all dropped: fetched all the same */
                             "http://d.example/\thttp://e.example/%s\thttp://e.example/%s\r\n"
                             "http://f.example/\n", long_path, too_long);
    char *dump = file_write("odd", text), *pages = memory_text("http://a.example/* http://b.example/x%%5Cy http://c.example/* http://d.example/* "
                                                               "http://e.example/%s http://f.example/* http://http//b.example/ ", long_path);
    const char *dumps[] = {dump};
    struct windrow_shard_options options = options_for(dumps, 1);
    options.shape = WINDROW_SHAPE_LISTS;
    check_pages(options, pages, 3);
    free(text);
    free(pages);
    free(dump);
    free(long_path);
    free(too_long);
}

static void dumps_of_nothing_make_a_store_of_nothing(void **state)
{
    (void)state;
    static const char *const nothing[] = {"", "\n\n", "ftp://a.example/\tftp://b.example/\n"};
    for (size_t i = 0; i < sizeof nothing / sizeof *nothing; i++) {
        char *dump = file_write("nothing", nothing[i]);
        const char *dumps[] = {dump, dump};
        for (size_t count = 1; count <= 2; count++)
            check_pages(options_for(dumps, count), "", 0);
        free(dump);
    }
}

static void long_lists_are_one_line(void **state)
{
    (void)state;
    /* 28,000 targets in over 2 MB, as a real crawl had them; twice, in two spellings. */
    struct windrow_buffer text = {0};
    char target[160];
    windrow_buffer_append(&text, "http://a.example/", 17);
    for (int round = 0; round < 2; round++)
        for (int i = 0; i < 28000; i++)
            windrow_buffer_append(&text, target, (size_t)sprintf(target, "\t%s://b.example%s/a-rather-long-path-that-makes-the-line-longer-than-a-chunk/%d",
                                                                 round ? "HTTP" : "http", round ? ":80" : "", i));
    windrow_buffer_append(&text, "\nhttp://c.example/\thttp://d.example/\n", 37);
    assert_true(text.bytes > 4 << 20);
    windrow_buffer_append(&text, "", 1);
    char *dump = file_write("long", (char *)text.data);
    const char *dumps[] = {dump};
    struct facts facts = shard_facts(options_for(dumps, 1));
    assert_int_equal(facts.links, 28001);
    free(facts.pages);
    free(dump);
    windrow_buffer_free(&text);
}

static void one_line_that_follows_is_enough(void **state)
{
    (void)state;
    char *dump = file_write("rel", "http://a.example/\thttp://b.example/\tnofollow\nhttp://a.example/\thttp://c.example/\tugc\n"
                                   "http://a.example/\thttp://b.example/\tnoopener\nhttp://a.example/\thttp://d.example/\tsponsored noopener\n");
    const char *dumps[] = {dump};
    struct windrow_shard_options options = options_for(dumps, 1);
    check_pages(options, "http://a.example/* http://b.example/ ", 1);
    options.keep_nofollow = true;
    check_pages(options, "http://a.example/* http://b.example/ http://c.example/ http://d.example/ ", 3);
    free(dump);
}

static int set_up(void **state)
{
    (void)state;
    directory = scratch_make();
    return 0;
}

static int tear_down(void **state)
{
    (void)state;
    scratch_remove(directory);
    return 0;
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(ids_make_the_store_of_their_names),
        cmocka_unit_test(ids_without_a_name_are_malformed),
        cmocka_unit_test(directories_and_lists_stand_for_their_files),
        cmocka_unit_test(takedowns_are_as_if_they_had_never_been),
        cmocka_unit_test(odd_lines_lose_nothing_else),
        cmocka_unit_test(dumps_of_nothing_make_a_store_of_nothing),
        cmocka_unit_test(long_lists_are_one_line),
        cmocka_unit_test(one_line_that_follows_is_enough),
    };
    return cmocka_run_group_tests(tests, set_up, tear_down);
}
