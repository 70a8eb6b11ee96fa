/* Registered domains, by the Public Suffix List's rules. */
#include "url/domain.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>

#include <cmocka.h>

static void registered_domains_follow_the_list(void **state)
{
    (void)state;
    /* The list's own format: one label more than the public suffix. */
    assert_string_equal(windrow_domain("a.b.co.uk"), "b.co.uk");
    assert_string_equal(windrow_domain("b.co.uk"), "b.co.uk");
    assert_string_equal(windrow_domain("www.north.example"), "north.example");
    /* Wildcard rule *.ck with the exception !www.ck, from the list's published test cases. */
    assert_string_equal(windrow_domain("www.www.ck"), "www.ck");
    assert_string_equal(windrow_domain("c.b.test.ck"), "b.test.ck");
    /* International suffixes stand in the list as A-labels too. */
    assert_string_equal(windrow_domain("a.b.xn--p1ai"), "b.xn--p1ai");
}

static void hosts_without_a_domain_are_their_own(void **state)
{
    (void)state;
    assert_string_equal(windrow_domain("co.uk"), "co.uk");
    assert_string_equal(windrow_domain("localhost"), "localhost");
    assert_string_equal(windrow_domain("192.0.2.1"), "192.0.2.1");
    assert_string_equal(windrow_domain("[::ffff:192.0.2.1]"), "[::ffff:192.0.2.1]");
    assert_string_equal(windrow_domain("[2001:db8::1]"), "[2001:db8::1]");
}

static void long_hosts_are_harmless(void **state)
{
    (void)state;
    static char host[65000];
    memset(host, 'a', sizeof host - 1);
    assert_ptr_equal(windrow_domain(host), host);
    for (size_t i = 1; i < sizeof host - 1; i += 2)
        host[i] = '.';
    assert_true(windrow_domain(host) >= host && windrow_domain(host) < host + sizeof host - 1);
}

static void version_names_library_and_list(void **state)
{
    (void)state;
    assert_non_null(strstr(windrow_domain_version(), "libpsl "));
    assert_non_null(strstr(windrow_domain_version(), ", list "));
    assert_string_equal(windrow_domain_version(), windrow_domain_version());
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(registered_domains_follow_the_list),
        cmocka_unit_test(hosts_without_a_domain_are_their_own),
        cmocka_unit_test(long_hosts_are_harmless),
        cmocka_unit_test(version_names_library_and_list),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
