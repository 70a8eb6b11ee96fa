/* Damage is found and named, never believed, and never a crash: every file of a store and its run,
 * bit by bit at random places, and cut short. `verify` answers 1 (or 4, where there is nothing left to
 * read the rest by); the other commands either do not touch the damaged bytes and answer what they
 * answer of the sound store, or exit with 4. */
#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <stdlib.h>
#include <string.h>

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/program.h"
#include "../common/ranking.h"
#include "../common/scratch.h"

struct room {
    char *directory;
    char *store;  /* sharded, ranked, sound */
    char *scores; /* `score --all` of it */
};

static int set_up(void **state)
{
    struct room *room = memory_array(1, sizeof *room);
    room->directory = scratch_make();
    room->store = scratch_path(room->directory, "store");
    char *dump = scratch_path(room->directory, "dump.tsv");
    struct dice dice = {31};
    struct graph graph = graph_random(&dice, GRAPH_SKEWED, 3000, 6);
    ranking_write_dump(dump, &graph, NAMING_FEW_HOSTS);
    MUST_WINDROW("shard", "--quiet", "--out", room->store, dump);
    MUST_WINDROW("rank", "--quiet", room->store);
    struct outcome outcome = WINDROW("score", "--all", room->store);
    outcome_expect(&outcome, 0);
    room->scores = outcome.out;
    outcome.out = NULL;
    outcome_free(&outcome);
    graph_free(&graph);
    free(dump);
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

static bool matters(const char *path)
{
    return strstr(path, "lock") == NULL && strstr(path, "log") == NULL;
}

/* No command crashes, or gives an answer that differs from the sound store's. */
static void expect_honest(const struct room *room, const char *store, const char *what)
{
    struct outcome outcome = WINDROW("score", "--all", store);
    if (outcome.exit_code == 0 ? strcmp(outcome.out, room->scores) != 0 : outcome.exit_code != 4 && outcome.exit_code != 1)
        fail_msg("%s: `score` exits with %d and other answers: %.500s", what, outcome.exit_code, outcome.err);
    outcome_free(&outcome);
    outcome = WINDROW("rank", "--quiet", "--run", "second", store);
    if (outcome.exit_code != 0 && outcome.exit_code != 4)
        fail_msg("%s: `rank` exits with %d: %.500s", what, outcome.exit_code, outcome.err);
    outcome_free(&outcome);
}

static void expect_found(const char *store, const char *what)
{
    struct outcome outcome = WINDROW("verify", "--quiet", store);
    if (outcome.exit_code != 1 && outcome.exit_code != 4)
        fail_msg("%s: `verify` exits with %d, and says: %.500s%.500s", what, outcome.exit_code, outcome.out, outcome.err);
    if (outcome.out_bytes + outcome.err_bytes == 0)
        fail_msg("%s: `verify` does not say what is damaged", what);
    outcome_free(&outcome);
}

static void test_sound_store(void **state)
{
    const struct room *room = *state;
    MUST_WINDROW("verify", "--quiet", room->store);
}

/* LMDB pages hold stale and unused bytes: a bit turned over there is not damage. So a flip in an
 * environment must only leave every answer honest; elsewhere it must be found too. */
static void test_turned_bits(void **state)
{
    const struct room *room = *state;
    struct scratch_listing files = scratch_list(room->store);
    struct dice dice = {32};
    size_t tried = 0;
    for (size_t i = 0; i < files.count; i++) {
        if (!matters(files.paths[i]) || files.file_bytes[i] == 0)
            continue;
        bool environment = strstr(files.paths[i], "data.mdb") != NULL;
        for (int turn = 0; turn < 2; turn++) {
            char *copy = scratch_path(room->directory, "turned"), *path = scratch_path(copy, files.paths[i]);
            scratch_copy(room->store, copy);
            size_t offset = dice_below(&dice, (uint32_t)files.file_bytes[i]);
            char *what = memory_text("%s, byte %zu turned", files.paths[i], offset);
            scratch_damage(path, offset);
            if (!environment)
                expect_found(copy, what);
            expect_honest(room, copy, what);
            scratch_remove(copy);
            free(path);
            free(what);
            tried++;
        }
    }
    assert_true(tried >= 8);
    scratch_listing_free(&files);
}

static void test_cut_files(void **state)
{
    const struct room *room = *state;
    struct scratch_listing files = scratch_list(room->store);
    for (size_t i = 0; i < files.count; i++) {
        if (!matters(files.paths[i]) || files.file_bytes[i] == 0)
            continue;
        for (int half = 0; half < 2; half++) { /* one byte short; half of it */
            char *copy = scratch_path(room->directory, "cut"), *path = scratch_path(copy, files.paths[i]);
            scratch_copy(room->store, copy);
            size_t left = half ? files.file_bytes[i] / 2 : files.file_bytes[i] - 1;
            char *what = memory_text("%s, cut to %zu bytes", files.paths[i], left);
            scratch_cut(path, left);
            expect_found(copy, what);
            expect_honest(room, copy, what);
            scratch_remove(copy);
            free(path);
            free(what);
        }
    }
    scratch_listing_free(&files);
}

static void test_missing_files(void **state)
{
    const struct room *room = *state;
    struct scratch_listing files = scratch_list(room->store);
    for (size_t i = 0; i < files.count; i++) {
        if (!matters(files.paths[i]) || files.file_bytes[i] == 0)
            continue;
        char *copy = scratch_path(room->directory, "missing"), *path = scratch_path(copy, files.paths[i]);
        scratch_copy(room->store, copy);
        MUST("rm", path);
        struct outcome outcome = WINDROW("verify", "--quiet", copy);
        if (outcome.exit_code != 1 && outcome.exit_code != 2 && outcome.exit_code != 4)
            fail_msg("%s is missing: `verify` exits with %d", files.paths[i], outcome.exit_code);
        outcome_free(&outcome);
        scratch_remove(copy);
        free(path);
    }
    scratch_listing_free(&files);
}

/* A damaged block is named by `verify` with exit code 1, and `rank` refuses it with 4. */
static void test_damaged_block(void **state)
{
    const struct room *room = *state;
    struct scratch_listing files = scratch_list(room->store);
    size_t largest = files.count;
    for (size_t i = 0; i < files.count; i++)
        if (strstr(files.paths[i], ".core.zst") != NULL && (largest == files.count || files.file_bytes[i] > files.file_bytes[largest]))
            largest = i;
    assert_true(largest < files.count);
    char *copy = scratch_path(room->directory, "block"), *path = scratch_path(copy, files.paths[largest]);
    scratch_copy(room->store, copy);
    scratch_damage(path, files.file_bytes[largest] / 2);
    struct outcome outcome = WINDROW("verify", copy);
    outcome_expect(&outcome, 1);
    outcome_free(&outcome);
    outcome = WINDROW("rank", "--run", "second", copy);
    outcome_expect(&outcome, 4);
    outcome_expect_talk(&outcome, strrchr(path, '/') + 1);
    outcome_free(&outcome);
    scratch_listing_free(&files);
    free(copy);
    free(path);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_sound_store),
        cmocka_unit_test(test_damaged_block),
        cmocka_unit_test(test_turned_bits),
        cmocka_unit_test(test_cut_files),
        cmocka_unit_test(test_missing_files),
    };
    return cmocka_run_group_tests_name("damage", tests, set_up, tear_down);
}
