/* `shard` keeps the memory that it was given, whatever the dumps, and makes the same store from a pipe in little memory
 * as from a file in much. */
#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <jansson.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/program.h"
#include "../common/scratch.h"

/* A sanitizer's own memory says nothing about ours. */
#ifdef __SANITIZE_ADDRESS__
#define PEAK_COUNTS false
#else
#define PEAK_COUNTS true
#endif

static uint64_t peak_of(const char *store)
{
    struct outcome outcome = WINDROW("status", "--json", store);
    outcome_expect(&outcome, 0);
    json_t *status = json_loads(outcome.out, 0, NULL);
    assert_non_null(status);
    uint64_t peak = (uint64_t)json_integer_value(json_object_get(status, "peak_memory_bytes"));
    assert_true(peak > 0);
    json_decref(status);
    outcome_free(&outcome);
    return peak;
}

/* Twenty million links within 320 MiB at --memory 256M. */
static void test_many_links(void **state)
{
    (void)state;
    char *directory = scratch_make(), *little = scratch_path(directory, "little"), *much = scratch_path(directory, "much");
    const char *build = program_build_directory();
    char *from_little = memory_text("%s/crawlgen --links 20M | %s/windrow shard --quiet --memory 256M --out %s -", build, build, little);
    char *from_much = memory_text("%s/crawlgen --links 20M | %s/windrow shard --quiet --memory 4G --threads 3 --out %s -", build, build, much);
    MUST("bash", "-c", from_little);
    assert_true(peak_of(little) <= UINT64_C(320) << 20 || !PEAK_COUNTS);
    MUST("bash", "-c", from_much);
    scratch_expect_same_store(little, much);
    free(little);
    free(much);
    free(from_little);
    free(from_much);
    scratch_remove(directory);
}

/* Nearly every page a host of its own: the tables of hosts must not count against the promise (64 MiB, and 64 MiB of grace). */
static void test_many_hosts(void **state)
{
    (void)state;
    enum { LINES = 60000, TARGETS = 20, HOSTS = 1500000 };
    char *directory = scratch_make(), *store = scratch_path(directory, "store"), *dump = scratch_path(directory, "dump");
    struct dice dice = {7};
    FILE *file = fopen(dump, "w");
    assert_non_null(file);
    for (int line = 0; line < LINES; line++)
        for (int field = 0; field <= TARGETS; field++) {
            uint32_t host = dice_below(&dice, HOSTS);
            fprintf(file, "http://host%u.zone%u.example/%s", host, host % 997, field < TARGETS ? "\t" : "\n");
        }
    assert_int_equal(fclose(file), 0);
    MUST_WINDROW("shard", "--quiet", "--memory", "64M", "--out", store, dump);
    assert_true(peak_of(store) <= UINT64_C(128) << 20 || !PEAK_COUNTS);
    free(store);
    free(dump);
    scratch_remove(directory);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_many_links),
        cmocka_unit_test(test_many_hosts),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
