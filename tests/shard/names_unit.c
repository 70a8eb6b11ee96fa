/* Names of ids: the table, and host names in either direction. */
#include "shard/names.h"

#include "base/file.h"
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

static char *told; /* what the table says: "id=URL ", "id=- " for a URL of another scheme */

static struct windrow_names_facts build(const char *text, uint64_t memory_bytes)
{
    char *scratch = scratch_make(), *file = scratch_path(scratch, "input"), *table = windrow_names_path(scratch);
    struct windrow_names_facts facts;
    struct windrow_records_reader reader;
    struct windrow_buffer out = {0};
    uint64_t key_bytes = 0, count = 0, before = 0;
    scratch_write_text(file, text);
    if (windrow_names_build(file, scratch, memory_bytes, NULL, &facts) != WINDROW_OK)
        fail_msg("%s", windrow_message());
    assert_int_equal(windrow_records_reader_open(&reader, table), WINDROW_OK);
    while (assert_int_equal(windrow_records_next(&reader), WINDROW_OK), !reader.ended) {
        const struct windrow_record *record = &reader.record;
        char line[64], url[256] = "-";
        assert_int_equal(record->key_bytes, WINDROW_NAMES_KEY_BYTES);
        assert_true(windrow_names_is_id((const char *)record->key));
        uint64_t id = windrow_names_id((const char *)record->key);
        assert_true(count == 0 || id > before);
        before = id;
        size_t bytes = record->value_bytes ? windrow_key_url((const char *)record->value, record->value_bytes, url, sizeof url) : 1;
        windrow_buffer_append(&out, line, (size_t)snprintf(line, sizeof line, "%llu=", (unsigned long long)id));
        windrow_buffer_append(&out, url, bytes);
        windrow_buffer_append(&out, " ", 1);
        key_bytes += record->value_bytes;
        count++;
    }
    windrow_buffer_append(&out, "", 1);
    assert_int_equal(facts.count, count);
    assert_int_equal(facts.key_bytes, key_bytes);
    windrow_records_reader_close(&reader);
    free(told);
    told = (char *)out.data;
    free(file);
    free(table);
    scratch_remove(scratch);
    return facts;
}

static void numbers_are_read(void **state)
{
    (void)state;
    uint64_t number = 7;
    assert_true(windrow_names_number("0", 1, &number));
    assert_int_equal(number, 0);
    assert_true(windrow_names_number("0012x", 4, &number));
    assert_int_equal(number, 12);
    assert_true(windrow_names_number("18446744073709551615", 20, &number));
    assert_true(number == UINT64_MAX);
    static const char *const wrong[] = {"", "18446744073709551616", "99999999999999999999", "-1", "+1", "1 ", "0x1", "1.0", "1e3"};
    for (size_t i = 0; i < sizeof wrong / sizeof *wrong; i++)
        if (windrow_names_number(wrong[i], strlen(wrong[i]), &number))
            fail_msg("%s", wrong[i]);
}

static void names_are_sorted_by_id(void **state)
{
    (void)state;
    struct windrow_names_facts facts = build("18446744073709551615\thttp://b.example/x\n7\tHTTPS://A.example#y\tmore\n\n0 c.example 12\n256\thttp://d.example:81/\n", 0);
    assert_string_equal(told, "0=http://c.example/ 7=https://a.example/ 256=http://d.example:81/ 18446744073709551615=http://b.example/x ");
    assert_int_equal(facts.bad_lines, 0);
    assert_int_equal(facts.reversed, 0);
    assert_int_equal(build("", 0).count, 0);
    /* Of several names of one id the smallest page in host order; another scheme only when there is no page. */
    build("1\thttp://b.example/\n1\tftp://a.example/\n1\thttp://a.example/z\n2\tmailto://x\n1\tb.example\n", 0);
    assert_string_equal(told, "1=http://a.example/z 2=- ");
    facts = build("1\n\thttp://a.example/\nx\thttp://a.example/\n18446744073709551616\ta.example\n1\thttp://\n2\ta.example/path\n3\ta b\n4\t?\n5\tfine.example\n", 0);
    /* "3<TAB>a b" is a name with a space in it, which no host may have. */
    assert_int_equal(facts.bad_lines, 8);
    assert_string_equal(told, "5=http://fine.example/ ");
}

/* The table of hosts with the ids 0, 1, 2 …, given as "host host host". */
static struct windrow_names_facts build_hosts(const char *hosts)
{
    struct windrow_buffer text = {0};
    for (unsigned id = 0; *hosts; id++) {
        char line[32];
        size_t bytes = strcspn(hosts, " ");
        windrow_buffer_append(&text, line, (size_t)snprintf(line, sizeof line, "%u\t", id));
        windrow_buffer_append(&text, hosts, bytes);
        windrow_buffer_append(&text, "\n", 1);
        hosts += bytes + (hosts[bytes] == ' ');
    }
    windrow_buffer_append(&text, "", 1);
    struct windrow_names_facts facts = build((char *)text.data, 1 << 20);
    windrow_buffer_free(&text);
    return facts;
}

static void reversed_hosts_are_recognised(void **state)
{
    (void)state;
    /* By top-level domains of the Public Suffix List. */
    assert_int_equal(build_hosts("org.invented-north.www com.invented").reversed, 1);
    assert_string_equal(told, "0=http://www.invented-north.org/ 1=http://invented.com/ ");
    assert_int_equal(build_hosts("www.invented-north.org invented.com").reversed, 0);
    assert_string_equal(told, "0=http://www.invented-north.org/ 1=http://invented.com/ ");
    /* A label may be a top-level domain and stand in front all the same: the majority decides. */
    assert_int_equal(build_hosts("shop.invented.org news.invented.com www.invented.net").reversed, 0);
    assert_int_equal(build_hosts("ORG.invented-north.WWW").reversed, 1);
    assert_string_equal(told, "0=http://www.invented-north.org/ ");
    /* Where no label is known, there are fewer top-level domains than first labels. */
    assert_int_equal(build_hosts("example.north.www example.south test.east").reversed, 1);
    assert_string_equal(told, "0=http://www.north.example/ 1=http://south.example/ 2=http://east.test/ ");
    assert_int_equal(build_hosts("www.north.example south.example east.test").reversed, 0);
    /* As many of one as of the other: as usual. */
    assert_int_equal(build_hosts("north.example").reversed, 0);
    assert_int_equal(build_hosts("localhost other").reversed, 0);
}

static void addresses_and_urls_are_never_turned(void **state)
{
    (void)state;
    assert_int_equal(build_hosts("example.north.www 192.0.2.7 http://south.example/x [::1] example.east. localhost").reversed, 1);
    assert_string_equal(told, "0=http://www.north.example/ 1=http://192.0.2.7/ 2=http://south.example/x 3=http://[::1]/ 5=http://localhost/ ");
    /* URLs and addresses do not vote. */
    assert_int_equal(build_hosts("192.0.2.7 192.0.3.8 192.0.2.9 http://a.b.example/ http://c.b.example/ www.south.example south.example").reversed, 0);
}

static void first_thousand_hosts_decide(void **state)
{
    (void)state;
    struct windrow_buffer text = {0};
    char line[64];
    for (unsigned id = 0; id < 3000; id++)
        windrow_buffer_append(&text, line, (size_t)snprintf(line, sizeof line, id < 600 ? "%u\torg.invented%u\n" : "%u\tinvented%u.org\n", id, id));
    windrow_buffer_append(&text, "", 1);
    assert_int_equal(build((char *)text.data, 100000).reversed, 1);
    assert_non_null(strstr(told, "599=http://invented599.org/ 600=http://org.invented600/ "));
    assert_non_null(strstr(told, "2999=http://org.invented2999/ "));
    windrow_buffer_free(&text);
}

static void any_order_and_memory_give_the_same_table(void **state)
{
    (void)state;
    enum { COUNT = 5000 };
    struct dice dice = {4};
    uint64_t ids[COUNT];
    char *expected = NULL;
    for (int i = 0; i < COUNT; i++)
        ids[i] = dice_next(&dice) >> dice_below(&dice, 64);
    for (int round = 0; round < 4; round++) {
        struct windrow_buffer text = {0};
        for (int i = COUNT - 1; i > 0; i--) {
            int other = (int)dice_below(&dice, (uint32_t)i + 1);
            uint64_t kept = ids[i];
            ids[i] = ids[other];
            ids[other] = kept;
        }
        for (int i = 0; i < COUNT; i++) {
            char line[96];
            windrow_buffer_append(&text, line, (size_t)snprintf(line, sizeof line, "%llu\thttp://a%llu.example/%llu\n", (unsigned long long)ids[i],
                                                                (unsigned long long)ids[i] % 100, (unsigned long long)ids[i]));
        }
        windrow_buffer_append(&text, "", 1);
        build((char *)text.data, 20000 + (uint64_t)round * round * 100000);
        if (!expected)
            expected = memory_text("%s", told);
        assert_string_equal(told, expected);
        windrow_buffer_free(&text);
    }
    free(expected);
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
        cmocka_unit_test(numbers_are_read),
        cmocka_unit_test(names_are_sorted_by_id),
        cmocka_unit_test(reversed_hosts_are_recognised),
        cmocka_unit_test(addresses_and_urls_are_never_turned),
        cmocka_unit_test(first_thousand_hosts_decide),
        cmocka_unit_test(any_order_and_memory_give_the_same_table),
    };
    return cmocka_run_group_tests(tests, NULL, told_free);
}
