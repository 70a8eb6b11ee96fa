/* `rank` with less memory than the vectors take: within its promise, killed and stopped, with any threads. */
#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <jansson.h>
#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/program.h"
#include "../common/scratch.h"

/* A quarter of what the vectors of this crawl take: 52 bytes a core page and 8 for each other one. */
#define MEMORY_KIBIBYTES 1450
#define MEMORY "1450K"
#define RANK(store, threads) ARGUMENTS("windrow", "rank", "--quiet", "--digits", "8", "--memory", MEMORY, "--threads", threads, "--checkpoint-every", "0.02s", store)

struct room {
    char *directory;
    char *store;
    char *scores;
    double rank_seconds;
};

static char *scores_of(const char *store)
{
    struct outcome outcome = WINDROW("score", "--all", store);
    outcome_expect(&outcome, 0);
    char *text = outcome.out;
    outcome.out = NULL;
    outcome_free(&outcome);
    return text;
}

static json_t *status_of(const char *store)
{
    struct outcome outcome = WINDROW("status", "--json", store);
    outcome_expect(&outcome, 0);
    json_t *status = json_loads(outcome.out, 0, NULL);
    assert_non_null(status);
    outcome_free(&outcome);
    return status;
}

static double number_of(const json_t *status, const char *key)
{
    json_t *value = json_object_get(status, key);
    assert_true(json_is_number(value));
    return json_number_value(value);
}

static int set_up(void **state)
{
    struct room *room = memory_array(1, sizeof *room);
    room->directory = scratch_make();
    char *dump = scratch_path(room->directory, "dump.tsv"), *ranked = scratch_path(room->directory, "ranked");
    room->store = scratch_path(room->directory, "store");
    assert_int_equal(program_wait(program_start(NULL, dump, NULL, ARGUMENTS("crawlgen", "--links", "2M"))), 0);
    MUST_WINDROW("shard", "--quiet", "--out", room->store, dump);
    scratch_copy(room->store, ranked);
    double start = program_clock_seconds();
    program_must(NULL, RANK(ranked, "2"));
    room->rank_seconds = program_clock_seconds() - start;
    room->scores = scores_of(ranked);
    free(dump);
    free(ranked);
    *state = room;
    return 0;
}

static int tear_down(void **state)
{
    struct room *room = *state;
    free(room->store);
    free(room->scores);
    scratch_remove(room->directory);
    free(room);
    return 0;
}

/* The vectors do not fit, and what is proven holds against a run with all the memory it wants. */
static void the_promise_is_kept(void **state)
{
    const struct room *room = *state;
    char *ranked = scratch_path(room->directory, "ranked"), *whole = scratch_path(room->directory, "whole");
    json_t *small = status_of(ranked);
    assert_true(4 * 1024.0 * MEMORY_KIBIBYTES < 1.1 * (52 * number_of(small, "core_pages") + 8 * number_of(small, "dangling_pages")));
#ifndef __SANITIZE_ADDRESS__ /* a sanitizer's own memory says nothing about ours */
    assert_true(number_of(small, "peak_memory_bytes") <= 1024.0 * MEMORY_KIBIBYTES + (64 << 20));
#endif
    assert_true(number_of(small, "digits") >= 8);
    scratch_copy(room->store, whole);
    MUST_WINDROW("rank", "--quiet", "--digits", "8", whole);
    json_t *large = status_of(whole);
    double bound = number_of(small, "error_l1") + number_of(large, "error_l1"), apart = 0;
    char *scores = scores_of(whole), *a = room->scores, *b = scores;
    assert_string_not_equal(scores, room->scores); /* or this was the same way of working */
    for (size_t line = 0; a && b && *a && *b; line++) {
        if (line > 0) { /* url, place, range, score */
            char *field_a = a, *field_b = b;
            for (int field = 0; field < 3; field++) {
                field_a = strchr(field_a, '\t') + 1;
                field_b = strchr(field_b, '\t') + 1;
            }
            double difference = strtod(field_a, NULL) - strtod(field_b, NULL);
            apart += difference < 0 ? -difference : difference;
        }
        a = strchr(a, '\n');
        b = strchr(b, '\n');
        a += a != NULL;
        b += b != NULL;
    }
    assert_true(apart > 0 && apart <= bound + 1e-14); /* rounding of this very sum */
    free(scores);
    json_decref(small);
    json_decref(large);
    free(ranked);
    free(whole);
}

static void threads_change_nothing(void **state)
{
    const struct room *room = *state;
    static const char *const threads[] = {"1", "3"};
    for (int i = 0; i < 2; i++) {
        char *store = scratch_path(room->directory, "threads");
        scratch_copy(room->store, store);
        program_must(NULL, RANK(store, threads[i]));
        char *scores = scores_of(store);
        assert_true(strcmp(scores, room->scores) == 0);
        free(scores);
        scratch_remove(store);
    }
}

static void killed_and_stopped_it_goes_on_to_the_same_bytes(void **state)
{
    const struct room *room = *state;
    static const int signals[] = {SIGKILL, SIGKILL, SIGINT};
    struct dice dice = {61};
    unsigned disturbed = 0;
    for (int job = 0; disturbed < 15; job++) {
        if (job > 300)
            fail_msg("the job is over before it can be disturbed");
        char *store = scratch_path(room->directory, "disturbed");
        scratch_copy(room->store, store);
        for (int row = 0; row < 5; row++) {
            int signal_number = signals[dice_below(&dice, 3)];
            pid_t process = program_start(NULL, NULL, NULL, RANK(store, row % 2 ? "1" : "2"));
            program_pause(room->rank_seconds * dice_below(&dice, 1000) / 1e3);
            kill(process, signal_number); /* not waited for yet, so the process id is still ours */
            int code = program_wait(process);
            if (code == 0)
                break;
            if (code != -SIGKILL && code != 6 && code != -SIGINT) /* killed before it could even listen */
                fail_msg("disturbed by signal %d, it exits with %d", signal_number, code);
            disturbed++;
        }
        program_must(NULL, RANK(store, "2"));
        char *scores = scores_of(store);
        assert_true(strcmp(scores, room->scores) == 0);
        MUST_WINDROW("verify", "--quiet", store);
        free(scores);
        scratch_remove(store);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(the_promise_is_kept),
        cmocka_unit_test(threads_change_nothing),
        cmocka_unit_test(killed_and_stopped_it_goes_on_to_the_same_bytes),
    };
    return cmocka_run_group_tests_name("small memory", tests, set_up, tear_down);
}
