/* Resolving aliases out of core, against the plain way in memory. */
#include "shard/alias.h"

#include "shard/records.h"
#include "url/key.h"
#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

#define NONE UINT32_MAX

/* Pages of the tests have numbers; their URLs sort in host order as the numbers do. */
static char *url_of(uint32_t page)
{
    return memory_text("http://h%u.example/%04u", 10 + page / 100, page);
}

static char *told; /* what the table says: "from>to " by page numbers */

static uint32_t page_of(const uint8_t *key, size_t key_bytes)
{
    char url[64];
    unsigned host, page;
    size_t bytes = windrow_key_url((const char *)key, key_bytes, url, sizeof url - 1);
    url[bytes] = 0;
    assert_int_equal(sscanf(url, "http://h%u.example/%u", &host, &page), 2);
    return page;
}

static struct windrow_alias_facts build(const char *text, uint64_t memory_bytes)
{
    char *scratch = scratch_make(), *file = scratch_path(scratch, "input"), *table = windrow_alias_path(scratch);
    struct windrow_alias_facts facts;
    scratch_write_text(file, text);
    if (windrow_alias_build(file, scratch, memory_bytes, NULL, &facts) != WINDROW_OK)
        fail_msg("%s", windrow_message());
    struct windrow_records_reader reader;
    struct windrow_buffer out = {0};
    uint64_t to_bytes = 0, count = 0;
    assert_int_equal(windrow_records_reader_open(&reader, table), WINDROW_OK);
    while (assert_int_equal(windrow_records_next(&reader), WINDROW_OK), !reader.ended) {
        char line[64];
        int bytes = snprintf(line, sizeof line, "%u>%u ", page_of(reader.record.key, reader.record.key_bytes),
                             page_of(reader.record.value, reader.record.value_bytes));
        assert_int_equal(windrow_buffer_append(&out, line, (size_t)bytes), WINDROW_OK);
        to_bytes += reader.record.value_bytes;
        count++;
    }
    assert_int_equal(facts.count, count);
    assert_int_equal(facts.to_bytes, to_bytes);
    windrow_records_reader_close(&reader);
    assert_int_equal(windrow_buffer_append(&out, "", 1), WINDROW_OK);
    free(told);
    told = (char *)out.data;
    /* Nothing is left but the table. */
    struct scratch_listing left = scratch_list(scratch);
    assert_int_equal(left.count, 2);
    scratch_listing_free(&left);
    free(file);
    free(table);
    scratch_remove(scratch);
    return facts;
}

/* Lines given as "from>to from>to …". */
static struct windrow_alias_facts build_pairs(const char *pairs, uint64_t memory_bytes)
{
    struct windrow_buffer text = {0};
    unsigned from, to;
    int used;
    for (; sscanf(pairs, " %u>%u%n", &from, &to, &used) == 2; pairs += used) {
        char *a = url_of(from), *b = url_of(to), *line = memory_text("%s\t%s\n", a, b);
        windrow_buffer_append(&text, line, strlen(line));
        free(a);
        free(b);
        free(line);
    }
    windrow_buffer_append(&text, "", 1);
    struct windrow_alias_facts facts = build((char *)text.data, memory_bytes);
    windrow_buffer_free(&text);
    return facts;
}

static void chains_are_followed_and_cycles_cut(void **state)
{
    (void)state;
    for (uint64_t memory_bytes = 0; memory_bytes <= 1 << 20; memory_bytes += 1 << 20) {
        assert_int_equal(build_pairs("", memory_bytes).count, 0);
        build_pairs("5>3", memory_bytes);
        assert_string_equal(told, "5>3 ");
        build_pairs("1>2 2>3 3>4", memory_bytes);
        assert_string_equal(told, "1>4 2>4 3>4 ");
        /* Of several TOs the smallest; an alias of itself says nothing, and is no TO to choose. */
        build_pairs("5>9 5>3 5>7 4>4 6>6 6>8", memory_bytes);
        assert_string_equal(told, "5>3 6>8 ");
        assert_int_equal(build_pairs("7>8 8>7", memory_bytes).cycles, 1);
        assert_string_equal(told, "8>7 ");
        /* A cycle of three, which doubling never meets, with tails. */
        assert_int_equal(build_pairs("5>3 3>7 7>5 1>2 2>7 9>1", memory_bytes).cycles, 1);
        assert_string_equal(told, "1>3 2>3 5>3 7>3 9>3 ");
        /* A cycle of four is met in the middle of the rounds, its tails later. */
        assert_int_equal(build_pairs("4>3 3>2 2>1 1>4 10>11 11>12 12>13 13>14 14>15 15>16 16>3", memory_bytes).cycles, 1);
        assert_string_equal(told, "2>1 3>1 4>1 10>1 11>1 12>1 13>1 14>1 15>1 16>1 ");
        assert_int_equal(build_pairs("2>1 1>2 5>4 4>6 6>5 8>9", memory_bytes).cycles, 2);
        assert_string_equal(told, "2>1 5>4 6>4 8>9 ");
    }
}

static void bad_lines_are_counted(void **state)
{
    (void)state;
    struct windrow_alias_facts facts = build("http://h10.example/0001\nftp://x/\thttp://h10.example/1\nhttp://h10.example/0002\t:\n\n"
                                             "HTTP://H10.example:80/0003#x\thttp://h10.example/0004\tmore\nnonsense\thttp://h10.example/1\n", 1 << 20);
    assert_int_equal(facts.bad_lines, 4);
    assert_string_equal(told, "3>4 ");
}

/* The plain way: everything in memory. */
static char *plain(const uint32_t *to, uint32_t pages)
{
    struct windrow_buffer out = {0};
    for (uint32_t page = 0; page < pages; page++) {
        uint32_t end = page, steps = 0;
        while (to[end] != NONE && steps++ < pages)
            end = to[end];
        if (to[end] != NONE) { /* on a cycle: its smallest */
            uint32_t at = to[end], smallest = end;
            for (; at != end; at = to[at])
                smallest = at < smallest ? at : smallest;
            end = smallest;
        }
        char line[64];
        if (end != page)
            windrow_buffer_append(&out, line, (size_t)snprintf(line, sizeof line, "%u>%u ", page, end));
    }
    windrow_buffer_append(&out, "", 1);
    return (char *)out.data;
}

static void random_files_equal_the_plain_way(void **state)
{
    (void)state;
    struct dice dice = {3};
    for (int round = 0; round < 60; round++) {
        uint32_t pages = 2 + dice_below(&dice, round % 3 ? 30 : 600), lines = dice_below(&dice, 2 * pages);
        uint32_t *to = memory_array(pages, sizeof *to);
        struct windrow_buffer text = {0};
        memset(to, 0xff, pages * sizeof *to);
        for (uint32_t line = 0; line < lines; line++) {
            /* Neighbours make long chains, anything else trees and cycles. */
            uint32_t from = dice_below(&dice, pages), next = round % 2 ? (from + 1) % pages : dice_below(&dice, pages);
            char *a = url_of(from), *b = url_of(next), *both = memory_text("%s\t%s\n", a, b);
            if (from != next && next < to[from])
                to[from] = next;
            windrow_buffer_append(&text, both, strlen(both));
            free(a);
            free(b);
            free(both);
        }
        windrow_buffer_append(&text, "", 1);
        char *expected = plain(to, pages);
        build((char *)text.data, round % 4 == 0 ? 1 << 20 : dice_below(&dice, 20000));
        assert_string_equal(told, expected);
        free(expected);
        windrow_buffer_free(&text);
        free(to);
    }
}

static void long_chains_and_large_cycles_take_few_rounds(void **state)
{
    (void)state;
    /* 5,000 pages in a chain that ends in a cycle of 1,000, whose smallest is page 0. */
    struct windrow_buffer text = {0}, expected = {0};
    for (uint32_t page = 0; page < 6000; page++) {
        uint32_t next = page < 999 ? page + 1 : page == 999 ? 0 : page - 1;
        char *a = url_of(page), *b = url_of(next), *line = memory_text("%s\t%s\n", a, b);
        windrow_buffer_append(&text, line, strlen(line));
        free(a);
        free(b);
        free(line);
        char said[64];
        if (page)
            windrow_buffer_append(&expected, said, (size_t)snprintf(said, sizeof said, "%u>0 ", page));
    }
    windrow_buffer_append(&text, "", 1);
    windrow_buffer_append(&expected, "", 1);
    assert_int_equal(build((char *)text.data, 100000).cycles, 1);
    assert_string_equal(told, (char *)expected.data);
    windrow_buffer_free(&text);
    windrow_buffer_free(&expected);
}

static void missing_file_is_named(void **state)
{
    (void)state;
    char *scratch = scratch_make();
    struct windrow_alias_facts facts;
    assert_int_equal(windrow_alias_build("/nowhere/aliases", scratch, 1 << 20, NULL, &facts), WINDROW_INPUT);
    assert_non_null(strstr(windrow_message(), "/nowhere/aliases"));
    scratch_remove(scratch);
}

static int told_free(void **state)
{
    (void)state;
    free(told);
    return 0;
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(chains_are_followed_and_cycles_cut),
        cmocka_unit_test(bad_lines_are_counted),
        cmocka_unit_test(random_files_equal_the_plain_way),
        cmocka_unit_test(long_chains_and_large_cycles_take_few_rounds),
        cmocka_unit_test(missing_file_is_named),
    };
    return cmocka_run_group_tests(tests, NULL, told_free);
}
