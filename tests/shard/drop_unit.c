/* Takedowns: URLs and hosts. */
#include "shard/drop.h"

#include "url/keyer.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

static char *scratch, *file;
static struct windrow_keyer *keyer;

static enum windrow_status load(const char *text, struct windrow_drop_set **drop)
{
    scratch_write_text(file, text);
    return windrow_drop_load(file, drop);
}

static bool has(const struct windrow_drop_set *drop, const char *url)
{
    const char *key;
    size_t key_bytes;
    assert_int_equal(windrow_keyer_key(keyer, url, strlen(url), &key, &key_bytes), WINDROW_URL_OK);
    return windrow_drop_has(drop, key, key_bytes);
}

static void urls_and_hosts_are_told_apart(void **state)
{
    (void)state;
    struct windrow_drop_set *drop;
    assert_int_equal(load("HTTP://A.example:80/x#y\tbecause of this\n\n north.EXAMPLE. \n[::1]\nhttps://b.example/\n", &drop), WINDROW_OK);
    assert_int_equal(windrow_drop_count(drop), 4);
    assert_true(has(drop, "http://a.example/x"));
    assert_false(has(drop, "https://a.example/x"));
    assert_false(has(drop, "http://a.example/xy"));
    assert_false(has(drop, "http://a.example/"));
    /* A host with all its schemes, ports and paths, but neither its subdomains nor hosts that only begin like it. */
    assert_true(has(drop, "http://north.example/"));
    assert_true(has(drop, "https://north.example:8080/a?b"));
    assert_false(has(drop, "http://www.north.example/"));
    assert_false(has(drop, "http://north.example.test/"));
    assert_false(has(drop, "http://norther.example/"));
    assert_false(has(drop, "http://example/"));
    assert_true(has(drop, "http://[::1]/x"));
    /* The URL of a home page is that page alone. */
    assert_true(has(drop, "https://b.example/"));
    assert_false(has(drop, "https://b.example/a"));
    windrow_drop_free(drop);
    assert_false(has(NULL, "http://north.example/"));
}

static void lines_that_mean_nothing_are_errors(void **state)
{
    (void)state;
    static const char *const wrong[] = {"ftp://a.example/\n", "http://\n", "a b.example\n", "a.example/x\n", "a.example:8080\n", "a.example?x\n", "\thttp://a.example/\n"};
    for (size_t i = 0; i < sizeof wrong / sizeof *wrong; i++) {
        char *text = memory_text("http://fine.example/\n\n%s", wrong[i]);
        struct windrow_drop_set *drop;
        if (load(text, &drop) != WINDROW_INPUT)
            fail_msg("%s", wrong[i]);
        assert_null(drop);
        assert_non_null(strstr(windrow_message(), file));
        assert_non_null(strstr(windrow_message(), "line 3"));
        free(text);
    }
    struct windrow_drop_set *drop;
    assert_int_equal(windrow_drop_load("/nowhere/drop", &drop), WINDROW_INPUT);
    assert_non_null(strstr(windrow_message(), "/nowhere/drop"));
}

static uint64_t fingerprint(const char *text)
{
    struct windrow_drop_set *drop;
    assert_int_equal(load(text, &drop), WINDROW_OK);
    uint64_t print = windrow_drop_fingerprint(drop);
    windrow_drop_free(drop);
    return print;
}

static void fingerprint_stands_for_what_is_dropped(void **state)
{
    (void)state;
    uint64_t print = fingerprint("a.example\nhttp://b.example/x\n");
    assert_true(print != 0);
    assert_int_equal(windrow_drop_fingerprint(NULL), 0);
    assert_true(print == fingerprint("http://B.example:80/x\tword\nA.example.\na.example\n"));
    assert_true(print != fingerprint("a.example\n"));
    assert_true(print != fingerprint("http://a.example/\nhttp://b.example/x\n"));
    assert_true(print != fingerprint("a.example\nhttp://b.example/y\n"));
}

static void many_are_found_again(void **state)
{
    (void)state;
    enum { COUNT = 20000 };
    char *text = memory_array(COUNT, 40), *at = text;
    for (int i = 0; i < COUNT; i++)
        at += sprintf(at, i % 2 ? "h%d.example\n" : "http://a.example/%d\n", i);
    struct windrow_drop_set *drop;
    assert_int_equal(load(text, &drop), WINDROW_OK);
    assert_int_equal(windrow_drop_count(drop), COUNT);
    assert_true(windrow_drop_memory_bytes(drop) > COUNT * 10);
    for (int i = 0; i < COUNT; i++) {
        char url[40];
        sprintf(url, "http://h%d.example/x", i);
        assert_int_equal(has(drop, url), i % 2);
        sprintf(url, "http://a.example/%d", i);
        assert_int_equal(has(drop, url), i % 2 == 0);
    }
    windrow_drop_free(drop);
    free(text);
}

static int set_up(void **state)
{
    (void)state;
    scratch = scratch_make();
    file = scratch_path(scratch, "drop");
    return windrow_keyer_create(&keyer);
}

static int tear_down(void **state)
{
    (void)state;
    windrow_keyer_destroy(keyer);
    free(file);
    scratch_remove(scratch);
    return 0;
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(urls_and_hosts_are_told_apart),
        cmocka_unit_test(lines_that_mean_nothing_are_errors),
        cmocka_unit_test(fingerprint_stands_for_what_is_dropped),
        cmocka_unit_test(many_are_found_again),
    };
    return cmocka_run_group_tests(tests, set_up, tear_down);
}
