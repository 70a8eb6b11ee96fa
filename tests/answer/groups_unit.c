/* Hosts and domains come in host order, each with exactly its own pages. */
#include "answer/groups.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <string.h>

#include <cmocka.h>

/* A host table: names in host order, how much of each is its domain, and how many pages it has. */
struct table {
    const char *name;
    uint32_t domain_bytes;
    uint64_t pages;
};

struct hosts {
    const struct table *table;
    uint64_t count;
};

static struct windrow_host table_host(const void *context, uint64_t host)
{
    const struct hosts *hosts = context;
    struct windrow_host found = {0};
    for (uint64_t i = 0; i < host; i++)
        found.first_page += hosts->table[i].pages;
    if (host < hosts->count) {
        found.name = hosts->table[host].name;
        found.name_bytes = (uint32_t)strlen(found.name);
        found.domain_bytes = hosts->table[host].domain_bytes;
    }
    return found;
}

/* "name first-end first-end, …" of all groups, one a line. */
static void expect_groups(const struct table *table, uint64_t count, enum windrow_per per, const char *expected)
{
    struct hosts hosts = {table, count};
    struct windrow_host_source source = {table_host, &hosts, count};
    struct windrow_groups groups;
    struct windrow_group group;
    char text[2048] = "";
    size_t used = 0;
    bool found;
    windrow_groups_begin(&groups, &source, per);
    for (;;) {
        assert_int_equal(windrow_groups_next(&groups, &group, &found), WINDROW_OK);
        if (!found)
            break;
        used += (size_t)snprintf(text + used, sizeof text - used, "%.*s", (int)group.name_bytes, group.name);
        for (size_t s = 0; s < group.span_count; s++)
            used += (size_t)snprintf(text + used, sizeof text - used, " %d-%d", (int)group.spans[s].first, (int)group.spans[s].end);
        used += (size_t)snprintf(text + used, sizeof text - used, "\n");
        assert_true(used < sizeof text);
    }
    windrow_groups_free(&groups);
    assert_string_equal(text, expected);
}

/* A hosting suffix pages.isle.example inside the registered domain isle.example; no host is isle.example itself. */
static const struct table nested[] = {
    {"example", 7, 1},
    {"bay.example", 11, 2},
    {"a.bay.example", 11, 3},
    {"ann.pages.isle.example", 22, 4},
    {"x.ann.pages.isle.example", 22, 1},
    {"bob.pages.isle.example", 22, 5},
    {"shop.isle.example", 12, 2},
    {"www.isle.example", 12, 2},
    {"zoo.example", 11, 1},
    {"4.3.2.1", 7, 1},
    {"[2001:db8::1]", 13, 1},
};

static void hosts_come_one_by_one(void **state)
{
    (void)state;
    expect_groups(nested, 4, WINDROW_PER_HOST, "example 0-1\nbay.example 1-3\na.bay.example 3-6\nann.pages.isle.example 6-10\n");
    expect_groups(nested, 0, WINDROW_PER_HOST, "");
}

static void a_domain_gathers_its_hosts_around_those_inside_it(void **state)
{
    (void)state;
    expect_groups(nested, sizeof nested / sizeof nested[0], WINDROW_PER_DOMAIN,
                  "example 0-1\nbay.example 1-6\nisle.example 16-20\nann.pages.isle.example 6-11\nbob.pages.isle.example 11-16\n"
                  "zoo.example 20-21\n4.3.2.1 21-22\n[2001:db8::1] 22-23\n");
    expect_groups(nested, 0, WINDROW_PER_DOMAIN, "");
}

static void a_domain_may_be_in_several_pieces(void **state)
{
    (void)state;
    static const struct table pieces[] = {
        {"isle.example", 12, 1}, {"a.isle.example", 12, 1},  {"m.p.isle.example", 16, 1}, {"r.isle.example", 12, 1},
        {"n.s.isle.example", 16, 1}, {"z.isle.example", 12, 2},
    };
    expect_groups(pieces, 6, WINDROW_PER_DOMAIN, "isle.example 0-2 3-4 5-7\nm.p.isle.example 2-3\nn.s.isle.example 4-5\n");
}

/* "isle" sorts before "isle-2", though '-' is below '.', which joins labels in the text. */
static void labels_are_compared_whole(void **state)
{
    (void)state;
    static const struct table labels[] = {
        {"a.isle.co.test", 12, 1}, {"b.c.isle.co.test", 14, 1}, {"d.isle.co.test", 12, 1}, {"isle-2.co.test", 14, 1}, {"isle0.co.test", 13, 1},
    };
    expect_groups(labels, 5, WINDROW_PER_DOMAIN, "isle.co.test 0-1 2-3\nc.isle.co.test 1-2\nisle-2.co.test 3-4\nisle0.co.test 4-5\n");
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(hosts_come_one_by_one),
        cmocka_unit_test(a_domain_gathers_its_hosts_around_those_inside_it),
        cmocka_unit_test(a_domain_may_be_in_several_pieces),
        cmocka_unit_test(labels_are_compared_whole),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
