/* Lines, sources and targets of a chunk. */
#include "dump/chunk.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

/* What a chunk holds, as text: "number>source|target|target!;", '!' behind a target that is not followed, "number?" for
 * a malformed line, '+' behind the number of a continued one. */
static const char *story(const char *text, size_t bytes, enum windrow_dump_shape shape, bool continued)
{
    static char told[4096];
    char *copy = malloc(bytes > 0 ? bytes : 1), *write = told;
    memcpy(copy, text, bytes);
    struct windrow_dump_chunk chunk = {
        .text = copy, .bytes = bytes, .capacity_bytes = bytes, .shape = shape, .first_line = 1, .continued = continued};
    struct windrow_dump_lines lines;
    struct windrow_dump_line line;
    struct windrow_dump_target target;
    windrow_dump_lines_begin(&lines, &chunk);
    told[0] = '\0';
    while (windrow_dump_lines_next(&lines, &line)) {
        write += sprintf(write, "%d%s", (int)line.number, line.continued ? "+" : "");
        if (line.malformed != NULL) {
            write += sprintf(write, "?;");
            continue;
        }
        write += sprintf(write, ">%.*s", (int)line.source_bytes, line.source);
        while (windrow_dump_line_target(&line, &target))
            write += sprintf(write, "|%.*s%s", (int)target.bytes, target.text, target.nofollow ? "!" : "");
        write += sprintf(write, ";");
    }
    windrow_dump_chunk_free(&chunk);
    assert_null(chunk.text);
    return told;
}

#define PAIRS(text) story(text, sizeof text - 1, WINDROW_DUMP_PAIRS, false)
#define IDS(text) story(text, sizeof text - 1, WINDROW_DUMP_IDS, false)
#define LISTS(text) story(text, sizeof text - 1, WINDROW_DUMP_LISTS, false)

static void pairs_are_read(void **state)
{
    (void)state;
    assert_string_equal(PAIRS("a\tb\nc\td\n"), "1>a|b;2>c|d;");
    assert_string_equal(PAIRS("a\tb\tnofollow\na\tc\tnoopener\na\td\tUgc, noopener"), "1>a|b!;2>a|c;3>a|d!;");
    assert_string_equal(PAIRS("a\tb\t\na\tc\t \t\n"), "1>a|b;2>a|c;");
}

static void lists_are_read(void **state)
{
    (void)state;
    assert_string_equal(LISTS("a\tb\tc\td\ne\tf"), "1>a|b|c|d;2>e|f;");
    assert_string_equal(LISTS("a\t\tb\t \tc\t\n"), "1>a|b|c;");
    assert_string_equal(LISTS("a\tnofollow\n"), "1>a|nofollow;");
}

static void source_alone_is_a_fetched_page(void **state)
{
    (void)state;
    assert_string_equal(PAIRS("a\nb\t\n"), "1>a;2>b;");
    assert_string_equal(LISTS("a\nb\t\t\n"), "1>a;2>b;");
}

static void empty_lines_are_skipped_but_numbered(void **state)
{
    (void)state;
    assert_string_equal(PAIRS(""), "");
    assert_string_equal(PAIRS("\n\n \t\r\na\tb\n\n\nc"), "4>a|b;7>c;");
}

static void white_space_around_fields_is_trimmed(void **state)
{
    (void)state;
    assert_string_equal(PAIRS(" a \t b \tnofollow \r\nc\td\r\n"), "1>a|b!;2>c|d;");
    assert_string_equal(LISTS(" a \t b b \t\vc\r\nd\r"), "1>a|b b|c;2>d;");
}

static void contradictions_to_pairs_are_malformed(void **state)
{
    (void)state;
    assert_string_equal(PAIRS("a\tb\tc\nd\te\tnofollow\tf\ng\th\ni\t\tnofollow\n"), "1?;2?;3>g|h;4?;");
    const char *text = "a\tb\tc\n";
    struct windrow_dump_chunk chunk = {.text = (char *)text, .bytes = strlen(text), .shape = WINDROW_DUMP_PAIRS, .first_line = 7};
    struct windrow_dump_lines lines;
    struct windrow_dump_line line;
    windrow_dump_lines_begin(&lines, &chunk);
    assert_true(windrow_dump_lines_next(&lines, &line));
    assert_non_null(strstr(line.malformed, "--shape lists"));
    assert_int_equal(line.number, 7);
    assert_int_equal(line.text_bytes, 5);
    assert_memory_equal(line.text, "a\tb\tc", 5);
}

static void leading_tab_is_an_empty_source(void **state)
{
    (void)state;
    assert_string_equal(PAIRS("\tb\n"), "1>|b;");
    assert_string_equal(LISTS(" \tb\tc\n"), "1>|b|c;");
}

static void junk_is_harmless(void **state)
{
    (void)state;
    assert_string_equal(PAIRS("\xFF\xFE\x01\tb\x7F\n"), "1>\xFF\xFE\x01|b\x7F;");
    char text[] = "a\0x\t\0\t\0\n\0";
    assert_non_null(story(text, sizeof text, WINDROW_DUMP_LISTS, false));
    assert_string_equal(story(text, sizeof text, WINDROW_DUMP_PAIRS, false), "1?;2>;");
    srandom(5);
    for (int round = 0; round < 100000; round++) {
        char junk[64];
        size_t bytes = (size_t)random() % sizeof junk;
        for (size_t i = 0; i < bytes; i++)
            junk[i] = random() % 2 ? "\t\n\r \0a"[random() % 6] : (char)random();
        story(junk, bytes, (enum windrow_dump_shape)(WINDROW_DUMP_PAIRS + round % 3), round % 4 == 0);
    }
}

static void byte_order_mark_is_skipped_at_the_beginning_only(void **state)
{
    (void)state;
    assert_string_equal(PAIRS("\xEF\xBB\xBF" "a\tb\n\xEF\xBB\xBF" "c"), "1>a|b;2>\xEF\xBB\xBF" "c;");
}

static void ids_are_read_between_any_white_space(void **state)
{
    (void)state;
    assert_string_equal(IDS("1\t2\n1 3\n4\t5 6  7\r\n"), "1>1|2;2>1|3;3>4|5|6|7;");
    assert_string_equal(IDS("  8 \t 9 \n\n10\n"), "1>8|9;3>10;");
    /* Whether a field is a number, others say. */
    assert_string_equal(IDS("-1 x\t2"), "1>-1|x|2;");
}

static void continued_line_says_so(void **state)
{
    (void)state;
    assert_string_equal(story("a\tb\nc\td\n", 8, WINDROW_DUMP_LISTS, true), "1+>a|b;2>c|d;");
}

static void fields_beyond_the_limit_stay_too_long(void **state)
{
    (void)state;
    size_t field_bytes = WINDROW_DUMP_FIELD_BYTES_MAX + 1, bytes = 3 * field_bytes + 2;
    char *text = malloc(bytes);
    memset(text, ' ', bytes);
    text[field_bytes] = text[2 * field_bytes + 1] = '\t';
    text[bytes - 1] = 'x';
    struct windrow_dump_chunk chunk = {.text = text, .bytes = bytes, .shape = WINDROW_DUMP_LISTS, .first_line = 1};
    struct windrow_dump_lines lines;
    struct windrow_dump_line line;
    struct windrow_dump_target target;
    windrow_dump_lines_begin(&lines, &chunk);
    assert_true(windrow_dump_lines_next(&lines, &line));
    assert_int_equal(line.source_bytes, field_bytes);
    assert_true(windrow_dump_line_target(&line, &target));
    assert_int_equal(target.bytes, field_bytes);
    /* One byte less, and the white space goes. */
    text[field_bytes - 1] = '\t';
    windrow_dump_lines_begin(&lines, &chunk);
    assert_true(windrow_dump_lines_next(&lines, &line));
    assert_int_equal(line.source_bytes, 0);

    /* A pair of more than its limit is no pair. */
    bytes = WINDROW_DUMP_PAIR_BYTES_MAX + 1;
    text = realloc(text, bytes);
    memset(text, 'x', bytes);
    text[1] = '\t';
    chunk = (struct windrow_dump_chunk){.text = text, .bytes = bytes, .shape = WINDROW_DUMP_PAIRS, .first_line = 1};
    windrow_dump_lines_begin(&lines, &chunk);
    assert_true(windrow_dump_lines_next(&lines, &line));
    assert_non_null(line.malformed);
    chunk.bytes--;
    windrow_dump_lines_begin(&lines, &chunk);
    assert_true(windrow_dump_lines_next(&lines, &line));
    assert_null(line.malformed);
    free(text);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(pairs_are_read),
        cmocka_unit_test(lists_are_read),
        cmocka_unit_test(source_alone_is_a_fetched_page),
        cmocka_unit_test(empty_lines_are_skipped_but_numbered),
        cmocka_unit_test(white_space_around_fields_is_trimmed),
        cmocka_unit_test(contradictions_to_pairs_are_malformed),
        cmocka_unit_test(leading_tab_is_an_empty_source),
        cmocka_unit_test(junk_is_harmless),
        cmocka_unit_test(byte_order_mark_is_skipped_at_the_beginning_only),
        cmocka_unit_test(ids_are_read_between_any_white_space),
        cmocka_unit_test(continued_line_says_so),
        cmocka_unit_test(fields_beyond_the_limit_stay_too_long),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
