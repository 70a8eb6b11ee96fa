/* The web builder's resolver against RFC 3986 section 5.4, whole, and 5.2.4. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <stdlib.h>
#include <string.h>

#include "reference.h"

static const char base[] = "http://a/b/c/d;p?q";

static void expect_table(const char *const (*table)[2], size_t count)
{
    for (size_t i = 0; i < count; i++) {
        char *resolved = reference_resolve(base, table[i][0]);
        if (strcmp(resolved, table[i][1]) != 0)
            fail_msg("\"%s\" became %s, expected %s", table[i][0], resolved, table[i][1]);
        free(resolved);
    }
}

static void test_normal_examples(void **state)
{
    (void)state;
    static const char *const table[][2] = { /* section 5.4.1 */
        {"g:h", "g:h"}, {"g", "http://a/b/c/g"}, {"./g", "http://a/b/c/g"}, {"g/", "http://a/b/c/g/"},
        {"/g", "http://a/g"}, {"//g", "http://g"}, {"?y", "http://a/b/c/d;p?y"}, {"g?y", "http://a/b/c/g?y"},
        {"#s", "http://a/b/c/d;p?q#s"}, {"g#s", "http://a/b/c/g#s"}, {"g?y#s", "http://a/b/c/g?y#s"},
        {";x", "http://a/b/c/;x"}, {"g;x", "http://a/b/c/g;x"}, {"g;x?y#s", "http://a/b/c/g;x?y#s"},
        {"", "http://a/b/c/d;p?q"}, {".", "http://a/b/c/"}, {"./", "http://a/b/c/"}, {"..", "http://a/b/"},
        {"../", "http://a/b/"}, {"../g", "http://a/b/g"}, {"../..", "http://a/"}, {"../../", "http://a/"},
        {"../../g", "http://a/g"},
    };
    expect_table(table, sizeof table / sizeof *table);
}

static void test_abnormal_examples(void **state)
{
    (void)state;
    static const char *const table[][2] = { /* section 5.4.2, the strict reading */
        {"../../../g", "http://a/g"}, {"../../../../g", "http://a/g"}, {"/./g", "http://a/g"}, {"/../g", "http://a/g"},
        {"g.", "http://a/b/c/g."}, {".g", "http://a/b/c/.g"}, {"g..", "http://a/b/c/g.."}, {"..g", "http://a/b/c/..g"},
        {"./../g", "http://a/b/g"}, {"./g/.", "http://a/b/c/g/"}, {"g/./h", "http://a/b/c/g/h"},
        {"g/../h", "http://a/b/c/h"}, {"g;x=1/./y", "http://a/b/c/g;x=1/y"}, {"g;x=1/../y", "http://a/b/c/y"},
        {"g?y/./x", "http://a/b/c/g?y/./x"}, {"g?y/../x", "http://a/b/c/g?y/../x"},
        {"g#s/./x", "http://a/b/c/g#s/./x"}, {"g#s/../x", "http://a/b/c/g#s/../x"}, {"http:g", "http:g"},
    };
    expect_table(table, sizeof table / sizeof *table);
}

static void test_dot_segments(void **state)
{
    (void)state;
    static const char *const table[][2] = { /* section 5.2.4 */
        {"/a/b/c/./../../g", "/a/g"}, {"mid/content=5/../6", "mid/6"},
    };
    for (size_t i = 0; i < 2; i++) {
        char path[32];
        strcpy(path, table[i][0]);
        reference_remove_dot_segments(path);
        assert_string_equal(path, table[i][1]);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_normal_examples),
        cmocka_unit_test(test_abnormal_examples),
        cmocka_unit_test(test_dot_segments),
    };
    return cmocka_run_group_tests_name("reference", tests, NULL, NULL);
}
