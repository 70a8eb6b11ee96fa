/* The ledger: records come back, all of a commit or none, also from a killed process; damaged ones are noticed. */
#include "store/ledger.h"

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <lmdb.h>
#include <setjmp.h>
#include <signal.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/wait.h>
#include <unistd.h>

#include <cmocka.h>

static struct windrow_ledger *open_ledger(const char *directory, bool only_read)
{
    struct windrow_ledger *ledger;
    assert_int_equal(windrow_ledger_open(directory, only_read, &ledger), WINDROW_OK);
    return ledger;
}

static enum windrow_status commit_text(struct windrow_ledger *ledger, const char *key, const char *text)
{
    struct windrow_ledger_record record = {key, text, strlen(text)};
    return windrow_ledger_commit(ledger, &record, 1);
}

static void test_records(void **state)
{
    (void)state;
    char *directory = scratch_make(), *path = scratch_path(directory, "ledger");
    struct windrow_ledger *ledger;
    char text[WINDROW_LEDGER_VALUE_BYTES_MAX], found[WINDROW_LEDGER_VALUE_BYTES_MAX];
    assert_int_equal(windrow_ledger_open(path, true, &ledger), WINDROW_NO);
    ledger = open_ledger(path, false);
    assert_int_equal(windrow_ledger_get(ledger, "a", found, 1), WINDROW_NO);
    struct windrow_ledger_record records[] = {{"b", "22", 2}, {"a", "1", 1}, {"empty", NULL, 0}};
    assert_int_equal(windrow_ledger_commit(ledger, records, 3), WINDROW_OK);
    assert_int_equal(windrow_ledger_get(ledger, "a", found, 1), WINDROW_OK);
    assert_memory_equal(found, "1", 1);
    assert_int_equal(windrow_ledger_get(ledger, "empty", NULL, 0), WINDROW_OK);
    assert_int_equal(windrow_ledger_get(ledger, "b", found, 3), WINDROW_DAMAGED); /* of another size */
    assert_int_equal(commit_text(ledger, "a", "2"), WINDROW_OK);
    memset(text, 'x', sizeof text);
    records[0] = (struct windrow_ledger_record){"long", text, sizeof text};
    assert_int_equal(windrow_ledger_commit(ledger, records, 1), WINDROW_OK);
    /* One record too long: none of the commit is there. */
    char too_long[WINDROW_LEDGER_VALUE_BYTES_MAX + 1] = {0};
    struct windrow_ledger_record half[] = {{"c", "3", 1}, {"d", too_long, sizeof too_long}};
    assert_int_equal(windrow_ledger_commit(ledger, half, 2), WINDROW_BUG);
    windrow_ledger_close(ledger);
    ledger = open_ledger(path, true);
    assert_int_equal(windrow_ledger_get(ledger, "c", found, 1), WINDROW_NO);
    assert_int_equal(windrow_ledger_get(ledger, "a", found, 1), WINDROW_OK);
    assert_memory_equal(found, "2", 1);
    assert_int_equal(windrow_ledger_get(ledger, "long", found, sizeof found), WINDROW_OK);
    assert_memory_equal(found, text, sizeof text);
    windrow_ledger_close(ledger);
    free(path);
    scratch_remove(directory);
}

/* A writer that was killed before its first byte has left a file of none. */
static void test_begun_file(void **state)
{
    (void)state;
    char *directory = scratch_make(), *data = scratch_path(directory, "data.mdb"), found;
    struct windrow_ledger *ledger;
    scratch_write_text(data, "");
    assert_int_equal(windrow_ledger_open(directory, true, &ledger), WINDROW_NO);
    ledger = open_ledger(directory, false);
    assert_int_equal(commit_text(ledger, "a", "1"), WINDROW_OK);
    windrow_ledger_close(ledger);
    ledger = open_ledger(directory, true);
    assert_int_equal(windrow_ledger_get(ledger, "a", &found, 1), WINDROW_OK);
    windrow_ledger_close(ledger);
    free(data);
    scratch_remove(directory);
}

struct seen {
    char keys[200];
    unsigned left;
};

static enum windrow_status see(void *context, const char *key, const void *value, size_t bytes)
{
    struct seen *seen = context;
    assert_memory_equal(value, key, bytes);
    strcat(strcat(seen->keys, key), " ");
    return --seen->left ? WINDROW_OK : WINDROW_STOPPED;
}

static void expect_keys(struct windrow_ledger *ledger, const char *prefix, unsigned most, enum windrow_status status, const char *keys)
{
    struct seen seen = {.left = most};
    assert_int_equal(windrow_ledger_each(ledger, prefix, see, &seen), status);
    assert_string_equal(seen.keys, keys);
}

static void test_each(void **state)
{
    (void)state;
    static const char *const keys[] = {"run/2", "a", "run/1", "run", "runs", "run/10"};
    char *directory = scratch_make();
    struct windrow_ledger *ledger = open_ledger(directory, false);
    expect_keys(ledger, "", 99, WINDROW_OK, "");
    for (size_t key = 0; key < sizeof keys / sizeof *keys; key++)
        assert_int_equal(commit_text(ledger, keys[key], keys[key]), WINDROW_OK);
    expect_keys(ledger, "run/", 99, WINDROW_OK, "run/1 run/10 run/2 ");
    expect_keys(ledger, "run", 99, WINDROW_OK, "run run/1 run/10 run/2 runs ");
    expect_keys(ledger, "runs", 99, WINDROW_OK, "runs ");
    expect_keys(ledger, "z", 99, WINDROW_OK, "");
    expect_keys(ledger, "", 99, WINDROW_OK, "a run run/1 run/10 run/2 runs ");
    expect_keys(ledger, "run/", 2, WINDROW_STOPPED, "run/1 run/10 ");
    windrow_ledger_close(ledger);
    scratch_remove(directory);
}

/* A record whose bytes changed is not believed, however it got there. */
static void test_damaged_record(void **state)
{
    (void)state;
    char *directory = scratch_make(), found[5];
    struct windrow_ledger *ledger = open_ledger(directory, false);
    assert_int_equal(commit_text(ledger, "other", "value"), WINDROW_OK);
    assert_int_equal(commit_text(ledger, "place", "value"), WINDROW_OK);
    windrow_ledger_close(ledger);
    char *data = scratch_path(directory, "data.mdb");
    size_t bytes;
    char *file = scratch_read(data, &bytes), *at = memmem(file, bytes, "placevalue", 10);
    assert_non_null(at);
    for (; at; at = memmem(at + 1, bytes - (size_t)(at + 1 - file), "placevalue", 10))
        scratch_damage(data, (size_t)(at - file) + 7);
    ledger = open_ledger(directory, true);
    assert_int_equal(windrow_ledger_get(ledger, "place", found, 5), WINDROW_DAMAGED);
    assert_int_equal(windrow_ledger_get(ledger, "other", found, 5), WINDROW_OK);
    struct seen seen = {.left = 99};
    assert_int_equal(windrow_ledger_each(ledger, "p", see, &seen), WINDROW_DAMAGED);
    windrow_ledger_close(ledger);
    free(file);
    free(data);
    scratch_remove(directory);
}

/* Invariant of a commit: all of its records or none. A child commits three equal numbers again and again and is killed. */
static void test_killed(void **state)
{
    (void)state;
    struct dice dice = {71};
    char *directory = scratch_make();
    uint64_t last = 0;
    for (int round = 0; round < 8; round++) {
        pid_t child = fork();
        assert_true(child >= 0);
        if (child == 0) {
            struct windrow_ledger *ledger;
            if (windrow_ledger_open(directory, false, &ledger))
                _exit(1);
            for (uint64_t number = last + 1;; number++) {
                struct windrow_ledger_record records[] = {{"one", &number, 8}, {"three", &number, 8}, {"two", &number, 8}};
                if (windrow_ledger_commit(ledger, records, 3))
                    _exit(1);
            }
        }
        usleep(2000 + dice_below(&dice, 60000));
        assert_int_equal(kill(child, SIGKILL), 0);
        int how;
        assert_int_equal(waitpid(child, &how, 0), child);
        assert_true(WIFSIGNALED(how));
        struct windrow_ledger *ledger = open_ledger(directory, false);
        uint64_t numbers[3] = {0};
        static const char *const keys[] = {"one", "two", "three"};
        for (int index = 0; index < 3; index++) {
            enum windrow_status status = windrow_ledger_get(ledger, keys[index], &numbers[index], 8);
            assert_true(status == WINDROW_OK || (status == WINDROW_NO && !last));
        }
        assert_int_equal(numbers[0], numbers[1]);
        assert_int_equal(numbers[0], numbers[2]);
        assert_true(numbers[0] >= last);
        last = numbers[0];
        windrow_ledger_close(ledger);
    }
    assert_true(last > 0);
    scratch_remove(directory);
}

static void test_lock(void **state)
{
    (void)state;
    char *directory = scratch_make(), *path = scratch_path(directory, "lock");
    int descriptor, second;
    assert_false(windrow_ledger_locked(path));
    assert_int_equal(windrow_ledger_lock(path, &descriptor), WINDROW_OK);
    assert_true(windrow_ledger_locked(path));
    assert_int_equal(windrow_ledger_lock(path, &second), WINDROW_RESOURCE);
    assert_int_equal(second, -1);
    close(descriptor);
    assert_false(windrow_ledger_locked(path));
    /* The lock of a dead process is none. */
    pid_t child = fork();
    if (child == 0) {
        windrow_ledger_lock(path, &descriptor);
        pause();
        _exit(0);
    }
    for (int tries = 0; tries < 1000 && !windrow_ledger_locked(path); tries++)
        usleep(5000);
    assert_true(windrow_ledger_locked(path));
    kill(child, SIGKILL);
    waitpid(child, NULL, 0);
    assert_int_equal(windrow_ledger_lock(path, &descriptor), WINDROW_OK);
    close(descriptor);
    char *nowhere = scratch_path(directory, "no/lock");
    assert_int_equal(windrow_ledger_lock(nowhere, &descriptor), WINDROW_RESOURCE);
    free(nowhere);
    free(path);
    scratch_remove(directory);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_records), cmocka_unit_test(test_each), cmocka_unit_test(test_damaged_record), cmocka_unit_test(test_begun_file),
        cmocka_unit_test(test_killed),  cmocka_unit_test(test_lock),
    };
    return cmocka_run_group_tests_name("ledger", tests, NULL, NULL);
}
