/* Jobs that are stopped: by a signal that asks (exit 6, and a word on how to go on), and by kill -9 at
 * any moment. Gone on with, they end in the bytes that an undisturbed job gives. */
#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/program.h"
#include "../common/scratch.h"

#define KILLS_OF_EACH_JOB 17 /* of three jobs: 51 in all */
#define MOST_KILLS_IN_A_ROW 6

struct room {
    char *directory;
    char *dump;
    char *input;          /* NULL: the dump is named; else it is standard input */
    char *store;          /* sharded without disturbance */
    char *scores;         /* ranked without disturbance */
    double shard_seconds; /* what an undisturbed job takes */
    double rank_seconds;
};

/* Small batches and frequent checkpoints, so that there is something to interrupt. */
#define SHARD(store, dump) ARGUMENTS("windrow", "shard", "--memory", "64M", "--out", store, dump)
#define RANK(store) ARGUMENTS("windrow", "rank", "--digits", "11", "--method", "power", "--checkpoint-every", "0.02s", store)

static char *scores_of(const char *store)
{
    struct outcome outcome = WINDROW("score", "--all", store);
    outcome_expect(&outcome, 0);
    char *text = outcome.out;
    outcome.out = NULL;
    outcome_free(&outcome);
    return text;
}

static double seconds_of(const char *const *arguments)
{
    double start = program_clock_seconds();
    program_must(NULL, arguments);
    return program_clock_seconds() - start;
}

static int set_up(void **state)
{
    struct room *room = memory_array(1, sizeof *room);
    room->directory = scratch_make();
    room->dump = scratch_path(room->directory, "dump.tsv");
    room->store = scratch_path(room->directory, "store");
    assert_int_equal(program_wait(program_start(NULL, room->dump, NULL, ARGUMENTS("crawlgen", "--links", "300K", "--seed", "6"))), 0);
    room->shard_seconds = seconds_of(SHARD(room->store, room->dump));
    char *ranked = scratch_path(room->directory, "ranked");
    scratch_copy(room->store, ranked);
    room->rank_seconds = seconds_of(RANK(ranked));
    room->scores = scores_of(ranked);
    free(ranked);
    *state = room;
    return 0;
}

static int tear_down(void **state)
{
    struct room *room = *state;
    free(room->dump);
    free(room->store);
    free(room->scores);
    scratch_remove(room->directory);
    free(room);
    return 0;
}

/* Starts a job and sends it a signal after a random part of `seconds`. Gives its exit code. */
static int disturb(struct dice *dice, int signal_number, const char *input, const char *talk, double seconds,
                   const char *const *arguments)
{
    pid_t process = program_start(input, NULL, talk, arguments);
    program_pause(seconds * dice_below(dice, 1000000) / 1e6);
    kill(process, signal_number); /* not waited for yet, so the process id is still ours */
    return program_wait(process);
}

/* Kills a job again and again until `kills` reaches its goal or the job has come to an end by itself;
 * then lets it end. */
static void kill_and_go_on(struct dice *dice, unsigned *kills, const char *input, double seconds, const char *const *arguments)
{
    for (int row = 0; row < MOST_KILLS_IN_A_ROW && *kills < KILLS_OF_EACH_JOB; row++) {
        int code = disturb(dice, SIGKILL, input, NULL, seconds, arguments);
        if (code == 0)
            break;
        if (code != -SIGKILL)
            fail_msg("after %u kills, the job gone on with exits with %d", *kills, code);
        ++*kills;
    }
    program_must(input, arguments);
}

static void kill_shards(const struct room *room, struct dice *dice, const char *input)
{
    unsigned kills = 0;
    for (int job = 0; kills < KILLS_OF_EACH_JOB; job++) {
        char *store = scratch_path(room->directory, "killed");
        if (job > 40 * KILLS_OF_EACH_JOB)
            fail_msg("the job is over before it can be killed");
        kill_and_go_on(dice, &kills, input, room->shard_seconds * 0.9, SHARD(store, input != NULL ? "-" : room->dump));
        scratch_expect_same_store(room->store, store);
        MUST_WINDROW("verify", "--quiet", store);
        scratch_remove(store);
    }
}

static void test_killed_shard(void **state)
{
    struct dice dice = {41};
    kill_shards(*state, &dice, NULL);
}

/* From standard input: the stream is fed again, and what was read before is skipped. */
static void test_killed_shard_of_a_stream(void **state)
{
    struct dice dice = {42};
    const struct room *room = *state;
    kill_shards(room, &dice, room->dump);
}

static void test_killed_rank(void **state)
{
    struct dice dice = {43};
    const struct room *room = *state;
    unsigned kills = 0;
    for (int job = 0; kills < KILLS_OF_EACH_JOB; job++) {
        char *store = scratch_path(room->directory, "killed");
        if (job > 40 * KILLS_OF_EACH_JOB)
            fail_msg("the job is over before it can be killed");
        scratch_copy(room->store, store);
        kill_and_go_on(&dice, &kills, NULL, room->rank_seconds * 0.9, RANK(store));
        char *scores = scores_of(store);
        if (strcmp(scores, room->scores) != 0)
            fail_msg("other scores after %u kills in all", kills);
        MUST_WINDROW("verify", "--quiet", store);
        free(scores);
        scratch_remove(store);
    }
}

/* SIGINT and SIGTERM: exit 6 with a line that says how to go on. A job may end before the signal
 * comes; it must be caught in the act several times. */
static void expect_stops(const struct room *room, struct dice *dice, double seconds, bool shard)
{
    static const int signals[] = {SIGINT, SIGTERM};
    char *talk = scratch_path(room->directory, "talk");
    unsigned stops = 0;
    for (int job = 0; stops < 6; job++) {
        char *store = scratch_path(room->directory, "stopped");
        if (job > 200)
            fail_msg("the job was stopped %u times only", stops);
        if (!shard)
            scratch_copy(room->store, store);
        const char *const *arguments = shard ? SHARD(store, room->dump) : RANK(store);
        int code = disturb(dice, signals[job % 2], NULL, talk, seconds, arguments);
        if (code == 6) {
            char *said = scratch_read(talk, NULL);
            if (strstr(said, "again") == NULL)
                fail_msg("it does not say how to go on: %.500s", said);
            free(said);
            stops++;
        } else if (code != 0 && code != -signals[job % 2]) { /* killed before it could even listen */
            fail_msg("stopped by a signal, it exits with %d", code);
        }
        program_must(NULL, arguments);
        if (shard) {
            scratch_expect_same_store(room->store, store);
        } else {
            char *scores = scores_of(store);
            assert_string_equal(scores, room->scores);
            free(scores);
        }
        scratch_remove(store);
    }
    free(talk);
}

static void test_stopped_shard(void **state)
{
    struct dice dice = {44};
    const struct room *room = *state;
    expect_stops(room, &dice, room->shard_seconds, true);
}

static void test_stopped_rank(void **state)
{
    struct dice dice = {45};
    const struct room *room = *state;
    expect_stops(room, &dice, room->rank_seconds, false);
}

/* What `status` says of a job whose owner is gone. */
static void test_state_of_a_dead_job(void **state)
{
    const struct room *room = *state;
    bool seen = false;
    for (int attempt = 0; attempt < 40 && !seen; attempt++) {
        char *store = scratch_path(room->directory, "dead");
        scratch_copy(room->store, store);
        pid_t process = program_start(NULL, NULL, NULL, RANK(store));
        program_pause(room->rank_seconds * (0.3 + 0.01 * attempt));
        kill(process, SIGKILL);
        if (program_wait(process) == -SIGKILL) {
            struct outcome outcome = WINDROW("status", "--json", store);
            outcome_expect(&outcome, 0);
            seen = strstr(outcome.out, "\"stopped\"") != NULL;
            assert_null(strstr(outcome.out, "\"ranking\""));
            outcome_free(&outcome);
        }
        scratch_remove(store);
    }
    assert_true(seen);
}

/* Ctrl-C at a terminal reaches both ends of a pipe: the stream ends early, and that must not be taken for its end. */
static void test_stopped_pipe(void **state)
{
    const struct room *room = *state;
    char *whole = scratch_path(room->directory, "whole"), *store = scratch_path(room->directory, "piped");
    char *windrow = memory_text("%s/windrow", program_build_directory()), *crawlgen = memory_text("%s/crawlgen", program_build_directory());
    char *stream = memory_text("%s --links 2M --seed 9", crawlgen);
    char *all = memory_text("%s | %s shard --quiet --memory 64M --out %s -", stream, windrow, whole);
    MUST("bash", "-c", all);
    unsigned stops = 0;
    for (int round = 0; round < 12 && stops < 3; round++) {
        char *stopped = memory_text("set -m; %s | %s shard --quiet --memory 64M --out %s - & sleep 0.%d; kill -INT -- -$!; wait $!", stream, windrow,
                                    store, 1 + round % 9);
        char *again = memory_text("%s | %s shard --quiet --memory 64M --out %s -", stream, windrow, store);
        struct outcome outcome = RUN("bash", "-c", stopped);
        stops += outcome.exit_code == 6;
        outcome_free(&outcome);
        MUST("bash", "-c", again);
        scratch_expect_same_store(whole, store);
        MUST("rm", "-r", store);
        free(stopped);
        free(again);
    }
    assert_true(stops > 0);
    free(whole);
    free(store);
    free(windrow);
    free(crawlgen);
    free(stream);
    free(all);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_killed_shard),
        cmocka_unit_test(test_killed_shard_of_a_stream),
        cmocka_unit_test(test_killed_rank),
        cmocka_unit_test(test_stopped_shard),
        cmocka_unit_test(test_stopped_pipe),
        cmocka_unit_test(test_stopped_rank),
        cmocka_unit_test(test_state_of_a_dead_job),
    };
    return cmocka_run_group_tests_name("stopped jobs", tests, set_up, tear_down);
}
