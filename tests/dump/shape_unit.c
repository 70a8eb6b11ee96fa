/* Recognising a dump's shape, and the link types of HTML. */
#include "dump/shape.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

static enum windrow_dump_shape shape_of(const char *sample)
{
    return windrow_dump_shape_recognise(sample, strlen(sample), true);
}

static void third_fields_of_rel_tokens_make_pairs(void **state)
{
    (void)state;
    assert_int_equal(shape_of("a:\tb:\tnofollow\n"), WINDROW_DUMP_PAIRS);
    assert_int_equal(shape_of("a:\tb:\na:\tc:\tUGC,sponsored noopener \r\n"), WINDROW_DUMP_PAIRS);
    /* Some damaged lines do not turn it over. */
    assert_int_equal(shape_of("a:\tb:\tnofollow\na:\tc:\tugc\na:\tb:\tx y z\tw\n"), WINDROW_DUMP_PAIRS);
}

static void lines_of_one_or_two_fields_leave_it_at_pairs(void **state)
{
    (void)state;
    assert_int_equal(shape_of(""), WINDROW_DUMP_PAIRS);
    assert_int_equal(shape_of("\n \n\t\n"), WINDROW_DUMP_PAIRS);
    assert_int_equal(shape_of("a:\n"), WINDROW_DUMP_PAIRS);
    assert_int_equal(shape_of("a:\tb:\na:\tc:\nb:"), WINDROW_DUMP_PAIRS);
    assert_int_equal(shape_of("a:\tb:\t\t \n"), WINDROW_DUMP_PAIRS);
}

static void other_third_fields_make_lists(void **state)
{
    (void)state;
    assert_int_equal(shape_of("a:\tb:\tc:\n"), WINDROW_DUMP_LISTS);
    assert_int_equal(shape_of("a:\tb:\tc:\td:\n"), WINDROW_DUMP_LISTS);
    assert_int_equal(shape_of("a:\nb:\tc:\nd:\te:\tf:"), WINDROW_DUMP_LISTS);
    assert_int_equal(shape_of("a:\tb:\tnofollow\tc:\n"), WINDROW_DUMP_LISTS);
}

static void numbers_only_make_ids(void **state)
{
    (void)state;
    assert_int_equal(shape_of("1\t2\n2\t3\r\n\n"), WINDROW_DUMP_IDS);
    assert_int_equal(shape_of("1 2\n2   3 4\n5\n"), WINDROW_DUMP_IDS);
    assert_int_equal(shape_of("1 2 x\n"), WINDROW_DUMP_PAIRS);
    assert_int_equal(shape_of("1\t2\na:\t3\n"), WINDROW_DUMP_PAIRS);
    assert_int_equal(shape_of("1\t\t2\n"), WINDROW_DUMP_LISTS);
}

static void only_the_first_thousand_lines_count(void **state)
{
    (void)state;
    static char sample[16000];
    size_t bytes = 0;
    for (int i = 0; i < 999; i++)
        bytes += (size_t)(stpcpy(sample + bytes, "a:\tb:\n") - (sample + bytes));
    strcpy(sample + bytes, "a:\tb:\tc:\n");
    assert_int_equal(shape_of(sample), WINDROW_DUMP_LISTS);
    strcpy(sample + bytes, "a:\tb:\na:\tb:\tc:\n");
    assert_int_equal(shape_of(sample), WINDROW_DUMP_PAIRS);
}

static void last_field_of_a_cut_line_means_nothing(void **state)
{
    (void)state;
    const char *cut = "a:\tb:\tnofollow\na:\tb:\tspons";
    assert_int_equal(windrow_dump_shape_recognise(cut, strlen(cut), false), WINDROW_DUMP_PAIRS);
    cut = "a:\tb:\tno";
    assert_int_equal(windrow_dump_shape_recognise(cut, strlen(cut), false), WINDROW_DUMP_PAIRS);
    cut = "a:\tb:\tc:\tno";
    assert_int_equal(windrow_dump_shape_recognise(cut, strlen(cut), false), WINDROW_DUMP_LISTS);
}

static void check_rel(const char *field, bool expected, bool expected_nofollow)
{
    bool nofollow = !expected_nofollow;
    if (windrow_dump_rel_read(field, strlen(field), &nofollow) != expected || nofollow != expected_nofollow)
        fail_msg("%s", field);
}

static void rel_tokens_are_read(void **state)
{
    (void)state;
    /* HTML standard, link types; ugc and sponsored are common practice. */
    check_rel("nofollow", true, true);
    check_rel("UGC", true, true);
    check_rel("Sponsored", true, true);
    check_rel(" noopener, ,nofollow\r", true, true);
    check_rel("noopener noreferrer external", true, false);
    check_rel("", true, false);
    check_rel(" , ", true, false);
    check_rel("nofollowing", false, false);
    check_rel("no", false, false);
    check_rel("http://a.example/", false, false);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(third_fields_of_rel_tokens_make_pairs),
        cmocka_unit_test(lines_of_one_or_two_fields_leave_it_at_pairs),
        cmocka_unit_test(other_third_fields_make_lists),
        cmocka_unit_test(numbers_only_make_ids),
        cmocka_unit_test(only_the_first_thousand_lines_count),
        cmocka_unit_test(last_field_of_a_cut_line_means_nothing),
        cmocka_unit_test(rel_tokens_are_read),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
