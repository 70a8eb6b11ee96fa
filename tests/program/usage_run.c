/* What the program says of itself, and its exit codes: 0 done, 1 the answer is no, 2 usage, 3 input
 * unusable (4 and 6 have their own files: damage_run.c, stop_run.c). */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "../common/memory.h"
#include "../common/program.h"
#include "../common/scratch.h"

struct room {
    char *directory;
    char *dump;
    char *store;  /* sharded and ranked */
    char *absent; /* nothing is there */
};

static int set_up(void **state)
{
    struct room *room = memory_array(1, sizeof *room);
    room->directory = scratch_make();
    room->dump = scratch_path(room->directory, "dump.tsv");
    room->store = scratch_path(room->directory, "store");
    room->absent = scratch_path(room->directory, "absent");
    scratch_write_text(room->dump, "http://a.example/1\thttp://a.example/2\n"
                                   "http://a.example/2\thttp://b.example/\n"
                                   "http://b.example/\thttp://a.example/1\n");
    MUST_WINDROW("shard", "--quiet", "--out", room->store, room->dump);
    MUST_WINDROW("rank", "--quiet", room->store);
    *state = room;
    return 0;
}

static int tear_down(void **state)
{
    struct room *room = *state;
    free(room->dump);
    free(room->store);
    free(room->absent);
    scratch_remove(room->directory);
    free(room);
    return 0;
}

static const char *const commands[] = {"shard", "rank", "status", "top", "score", "verify"};
#define COMMAND_COUNT (sizeof commands / sizeof *commands)

static void expect_help(const struct outcome *outcome, const char *must_hold)
{
    outcome_expect(outcome, 0);
    assert_non_null(strstr(outcome->out, must_hold));
    assert_string_equal(outcome->err, "");
}

static void test_help_and_version(void **state)
{
    (void)state;
    struct outcome outcome = WINDROW("--help");
    for (size_t i = 0; i < COMMAND_COUNT; i++)
        expect_help(&outcome, commands[i]);
    outcome_free(&outcome);
    outcome = WINDROW("--version");
    expect_help(&outcome, "windrow");
    outcome_free(&outcome);
    for (size_t i = 0; i < COMMAND_COUNT; i++) {
        outcome = WINDROW(commands[i], "--help");
        expect_help(&outcome, "--");
        outcome_free(&outcome);
    }
    outcome = RUN("crawlgen", "--help");
    expect_help(&outcome, "--links");
    outcome_free(&outcome);
}

/* Exit code 2, and something on standard error that says why; nothing on standard output. */
static void expect_usage(const char *const *arguments)
{
    struct outcome outcome = program_run(NULL, arguments);
    outcome_expect(&outcome, 2);
    assert_int_equal(outcome.out_bytes, 0);
    assert_true(outcome.err_bytes > 0);
    outcome_free(&outcome);
}
#define USAGE(...) expect_usage(ARGUMENTS("windrow", __VA_ARGS__))

static void test_usage_errors(void **state)
{
    const struct room *room = *state;
    expect_usage(ARGUMENTS("windrow"));
    USAGE("winnow");
    USAGE("--no-such-option");
    for (size_t i = 0; i < COMMAND_COUNT; i++) {
        USAGE(commands[i], "--no-such-option");
        USAGE(commands[i]);
    }
    USAGE("shard", room->dump);
    USAGE("shard", "--out", room->absent);
    USAGE("shard", "--out", room->absent, "--memory", "much", room->dump);
    USAGE("shard", "--out", room->absent, "--memory", "64X", room->dump);
    USAGE("shard", "--out", room->absent, "--threads", "0", room->dump);
    USAGE("shard", "--out", room->absent, "--shape", "triples", room->dump);
    USAGE("shard", "--out", room->absent, "--nofollow", "perhaps", room->dump);
    assert_false(scratch_exists(room->absent));
    USAGE("rank", room->absent);
    USAGE("rank", "--run", "r", "--beta", "0", room->store);
    USAGE("rank", "--run", "r", "--beta", "1", room->store);
    USAGE("rank", "--run", "r", "--beta", "1.5", room->store);
    USAGE("rank", "--run", "r", "--beta", "nan", room->store);
    USAGE("rank", "--run", "r", "--digits", "-3", room->store);
    USAGE("rank", "--run", "r", "--error", "-1e-9", room->store);
    USAGE("rank", "--run", "r", "--checkpoint-every", "often", room->store);
    USAGE("rank", "--run", "r", "--method", "magic", room->store);
    USAGE("rank", "--run", "../r", room->store);
    USAGE("top", "--per", "planet", room->store);
    USAGE("top", "--count", "-1", room->store);
    USAGE("top", "--format", "xml", room->store);
    USAGE("top", room->absent);
    USAGE("score", room->absent, "http://a.example/1");
    USAGE("status", room->absent);
    USAGE("verify", room->absent);
}

static void test_answers_that_are_no(void **state)
{
    const struct room *room = *state;
    struct outcome outcome = WINDROW("score", room->store, "http://a.example/1", "http://nobody.example/", "HTTP://B.example");
    outcome_expect(&outcome, 1);
    outcome_expect_talk(&outcome, "http://nobody.example/");
    assert_non_null(strstr(outcome.out, "\nhttp://a.example/1\t"));
    assert_non_null(strstr(outcome.out, "\nhttp://b.example/\t"));
    assert_null(strstr(outcome.out, "nobody"));
    outcome_free(&outcome);

    char *unranked = scratch_path(room->directory, "unranked");
    MUST_WINDROW("shard", "--quiet", "--out", unranked, room->dump);
    outcome = WINDROW("top", unranked);
    outcome_expect(&outcome, 1);
    outcome_expect_talk(&outcome, "not ranked yet");
    outcome_free(&outcome);
    outcome = WINDROW("score", unranked, "http://a.example/1");
    outcome_expect(&outcome, 1);
    outcome_expect_talk(&outcome, "not ranked yet");
    outcome_free(&outcome);
    free(unranked);
}

static void test_unusable_input(void **state)
{
    const struct room *room = *state;
    char *bad = scratch_path(room->directory, "bad.tsv");
    struct outcome outcome = WINDROW("shard", "--out", room->absent, bad);
    outcome_expect(&outcome, 3); /* there is no such file */
    outcome_expect_talk(&outcome, bad);
    outcome_free(&outcome);

    /* More than a tenth of the URL fields make no sense: the dump is refused, the new store removed. */
    scratch_write_text(bad, "http://a.example/\thttp://b.example/\nnonsense\tmore nonsense\nhttp://a.example/\thttp:/c\n");
    outcome = WINDROW("shard", "--out", room->absent, bad);
    outcome_expect(&outcome, 3);
    outcome_expect_talk(&outcome, "malformed");
    outcome_free(&outcome);
    assert_false(scratch_exists(room->absent));

    /* The same dump passes when the user says that he knows. */
    MUST_WINDROW("shard", "--quiet", "--bad-max", "1", "--out", room->absent, bad);
    free(bad);
}

static void test_empty_dump(void **state)
{
    const struct room *room = *state;
    char *empty = scratch_path(room->directory, "empty.tsv");
    scratch_write_text(empty, "");
    struct outcome outcome = WINDROW("shard", "--out", room->absent, empty);
    assert_true(outcome.exit_code == 0 || outcome.exit_code == 3); /* nothing to shard, or a store of nothing */
    assert_true(outcome.err_bytes > 0);
    outcome_free(&outcome);
    free(empty);
}

/* A run says what it was begun with; other settings under its name are refused, with the ways out. */
static void test_settings_of_a_run(void **state)
{
    const struct room *room = *state;
    struct outcome outcome = WINDROW("rank", "--beta", "0.9", room->store);
    outcome_expect(&outcome, 2);
    outcome_expect_talk(&outcome, "--fresh");
    outcome_expect_talk(&outcome, "--run");
    outcome_free(&outcome);
    MUST_WINDROW("rank", "--quiet", "--beta", "0.9", "--run", "other", room->store);
    MUST_WINDROW("rank", "--quiet", "--beta", "0.9", "--fresh", room->store);
}

/* Running a finished run again says so and does nothing; more digits go on from where it is. */
static void test_finished_run(void **state)
{
    const struct room *room = *state;
    struct outcome before = WINDROW("score", "--all", room->store);
    struct outcome outcome = WINDROW("rank", room->store);
    outcome_expect(&outcome, 0);
    assert_true(outcome.err_bytes > 0);
    outcome_free(&outcome);
    struct outcome after = WINDROW("score", "--all", room->store);
    assert_string_equal(before.out, after.out);
    outcome_free(&before);
    outcome_free(&after);
    MUST_WINDROW("rank", "--quiet", "--digits", "11", room->store);
    outcome = WINDROW("status", "--json", room->store);
    const char *digits = strstr(outcome.out, "\"digits\"");
    assert_non_null(digits);
    assert_true(strtod(strchr(digits, ':') + 1, NULL) >= 11);
    outcome_free(&outcome);
}

/* A finished store of the same dumps is left as it is; other dumps are refused. */
static void test_finished_store(void **state)
{
    const struct room *room = *state;
    struct outcome outcome = WINDROW("shard", "--out", room->store, room->dump);
    outcome_expect(&outcome, 0);
    assert_true(outcome.err_bytes > 0);
    outcome_free(&outcome);
    char *other = scratch_path(room->directory, "other.tsv");
    scratch_write_text(other, "http://c.example/\thttp://d.example/\n");
    USAGE("shard", "--out", room->store, other);
    MUST_WINDROW("verify", "--quiet", room->store);
    free(other);
}

static void test_quiet(void **state)
{
    const struct room *room = *state;
    static const char *const jobs[][2] = {{"rank", "--fresh"}, {"verify", "--quiet"}};
    struct outcome outcome = WINDROW("shard", "--quiet", "--out", room->absent, room->dump);
    outcome_expect(&outcome, 0);
    assert_string_equal(outcome.err, "");
    assert_string_equal(outcome.out, "");
    outcome_free(&outcome);
    for (int i = 0; i < 2; i++) {
        outcome = WINDROW(jobs[i][0], "--quiet", jobs[i][1], room->store);
        outcome_expect(&outcome, 0);
        assert_string_equal(outcome.err, "");
        outcome_free(&outcome);
    }
    char *nothing = scratch_path(room->directory, "nothing");
    outcome = WINDROW("shard", "--quiet", "--out", nothing, "/nowhere/at/all");
    assert_int_equal(outcome.exit_code, 3);
    assert_true(outcome.err_bytes > 0); /* errors are not talk */
    assert_false(scratch_exists(nothing));
    outcome_free(&outcome);
    free(nothing);
}

/* `windrow top | head` is common, and a full device is not success. */
static void test_output_that_cannot_be_written(void **state)
{
    const struct room *room = *state;
    char *command = memory_text("'%s/windrow' score --all '%s' >/dev/full", program_build_directory(), room->store);
    struct outcome outcome = RUN("sh", "-c", command);
    assert_int_not_equal(outcome.exit_code, 0);
    assert_true(outcome.exit_code > 0 && outcome.err_bytes > 0);
    outcome_free(&outcome);
    free(command);
}

#define TEST(function) cmocka_unit_test_setup_teardown(function, set_up, tear_down)

int main(void)
{
    const struct CMUnitTest tests[] = {
        TEST(test_help_and_version),
        TEST(test_usage_errors),
        TEST(test_answers_that_are_no),
        TEST(test_unusable_input),
        TEST(test_empty_dump),
        TEST(test_settings_of_a_run),
        TEST(test_finished_run),
        TEST(test_finished_store),
        TEST(test_quiet),
        TEST(test_output_that_cannot_be_written),
    };
    return cmocka_run_group_tests_name("usage and exit codes", tests, NULL, NULL);
}
