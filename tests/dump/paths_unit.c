/* Dump arguments: directories and lists of files. */
#include "dump/paths.h"

#include "base/file.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

#include <cmocka.h>

static char *directory;

static int directory_make(void **state)
{
    (void)state;
    directory = scratch_make();
    /* Relative names keep the expectations short. */
    return chdir(directory);
}

static int directory_drop(void **state)
{
    (void)state;
    if (chdir("/") != 0)
        return -1;
    scratch_remove(directory);
    return 0;
}

/* What arguments (ended by NULL) stand for, joined by blanks; "?" when that is an error. */
static const char *expand(const char *first, ...)
{
    static char told[4096];
    const char *arguments[8] = {first};
    size_t count = 1;
    va_list rest;
    va_start(rest, first);
    while ((arguments[count] = va_arg(rest, const char *)) != NULL)
        count++;
    va_end(rest);
    struct windrow_dump_paths paths;
    enum windrow_status status = windrow_dump_paths_expand(arguments, count, &paths);
    if (status != WINDROW_OK) {
        assert_int_equal(status, WINDROW_INPUT);
        assert_null(paths.paths);
        return "?";
    }
    told[0] = '\0';
    for (size_t i = 0; i < paths.count; i++)
        strcat(strcat(told, i > 0 ? " " : ""), paths.paths[i]);
    windrow_dump_paths_free(&paths);
    return told;
}

static void other_names_stay(void **state)
{
    (void)state;
    assert_string_equal(expand("b", "-", "missing/x", "./@y", "b", NULL), "b - missing/x ./@y b");
}

static void directories_are_their_files_sorted(void **state)
{
    (void)state;
    assert_int_equal(mkdir("in", 0777), 0);
    assert_int_equal(mkdir("in/sub", 0777), 0);
    scratch_write_text("in/sub/hidden", "");
    scratch_write_text("in/.dot", "");
    scratch_write_text("in/b", "");
    scratch_write_text("in/a10", "");
    scratch_write_text("in/a9", "");
    scratch_write_text("in/B", "");
    scratch_write_text("in/\xC3\xA4", "");
    assert_int_equal(symlink("b", "in/to-b"), 0);
    assert_int_equal(symlink("nowhere", "in/to-nowhere"), 0);
    const char *all = "in/B in/a10 in/a9 in/b in/to-b in/\xC3\xA4";
    assert_string_equal(expand("in", NULL), all);
    assert_string_equal(expand("in/", NULL), all);
    assert_string_equal(expand("x", "in/sub", "in/sub//", "y", NULL), "x in/sub/hidden in/sub/hidden y");
    assert_int_equal(mkdir("empty", 0777), 0);
    scratch_write_text("empty/.dot", "");
    assert_string_equal(expand("x", "empty", NULL), "?");
    assert_non_null(strstr(windrow_message(), "empty holds no files"));
}

static void lists_name_paths(void **state)
{
    (void)state;
    assert_int_equal(mkdir("listed", 0777), 0);
    scratch_write_text("listed/1", "");
    scratch_write_text("listed/2", "");
    scratch_write_text("list", "one\n\nlisted\r\n@three\na b\nlast");
    assert_string_equal(expand("@list", "x", NULL), "one listed/1 listed/2 @three a b last x");
    scratch_write_text("list", "\n\n");
    assert_string_equal(expand("@list", NULL), "?");
    assert_non_null(strstr(windrow_message(), "list names no file"));
    assert_string_equal(expand("@missing", NULL), "?");
    assert_non_null(strstr(windrow_message(), "missing"));
    scratch_write("list", "one\n\0two\n", 9);
    assert_string_equal(expand("@list", NULL), "?");
    scratch_write("list", "one\ntw\0o\n", 9);
    assert_string_equal(expand("@list", NULL), "?");
    assert_non_null(strstr(windrow_message(), "NUL"));
}

static void many_names_are_no_trouble(void **state)
{
    (void)state;
    struct windrow_buffer text = {0};
    for (int i = 0; i < 5000; i++) {
        char line[32];
        assert_int_equal(windrow_buffer_append(&text, line, (size_t)snprintf(line, sizeof line, "file-%d\n", i)), WINDROW_OK);
    }
    scratch_write("many", text.data, text.bytes);
    windrow_buffer_free(&text);
    const char *const arguments[] = {"@many", "@many"};
    struct windrow_dump_paths paths;
    assert_int_equal(windrow_dump_paths_expand(arguments, 2, &paths), WINDROW_OK);
    assert_int_equal(paths.count, 10000);
    assert_string_equal(paths.paths[4999], "file-4999");
    assert_string_equal(paths.paths[9999], "file-4999");
    windrow_dump_paths_free(&paths);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(other_names_stay),
        cmocka_unit_test(directories_are_their_files_sorted),
        cmocka_unit_test(lists_name_paths),
        cmocka_unit_test(many_names_are_no_trouble),
    };
    return cmocka_run_group_tests(tests, directory_make, directory_drop);
}
