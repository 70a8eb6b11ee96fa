/* A run on disk whose vectors are larger than the memory it is given: agrees, resumes, refuses. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <stdatomic.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"
#include "rank/run.h"

/* Enough for a third of the vectors that a ranking of this store looks at in a sweep, and for less. */
enum { PAGES = 24000, LINKS_PER_PAGE = 50, SMALL_MEMORY = 260 << 10, SMALLER_MEMORY = 170 << 10 };

struct room {
    char *directory;
    char *store;
    double *scores; /* of a run in memory, to 9 digits */
    uint64_t pages;
};

static struct windrow_rank_options options_for(const struct room *room, const char *run, double digits)
{
    struct windrow_rank_options options;
    windrow_rank_defaults(&options);
    options.store = room->store;
    options.run = run;
    options.digits = digits;
    options.threads = 2;
    return options;
}

static struct windrow_store *open_store(const struct room *room)
{
    struct windrow_store *store;
    assert_int_equal(windrow_store_open(room->store, &store), WINDROW_OK);
    return store;
}

static int set_up(void **state)
{
    struct room *room = memory_array(1, sizeof *room);
    room->directory = scratch_make();
    room->store = scratch_path(room->directory, "store");
    char *dump = scratch_path(room->directory, "dump.tsv");
    FILE *file = fopen(dump, "w");
    assert_non_null(file);
    struct dice dice = {31};
    struct graph graph = graph_random(&dice, GRAPH_EVEN, PAGES, LINKS_PER_PAGE);
    for (size_t i = 0; i < graph.link_count; i++)
        fprintf(file, "http://h%u.example/p%u\thttp://h%u.example/p%u\n", graph.links[i].source / 500, graph.links[i].source,
                graph.links[i].target / 500, graph.links[i].target);
    assert_int_equal(fclose(file), 0);
    graph_free(&graph);
    struct windrow_shard_options shard;
    windrow_shard_defaults(&shard);
    const char *dumps[] = {dump};
    shard.out = room->store;
    shard.dumps = dumps;
    shard.dump_count = 1;
    if (windrow_shard(&shard, NULL))
        fail_msg("%s", windrow_message());
    free(dump);
    struct windrow_rank_options options = options_for(room, "whole", 9);
    if (windrow_rank(&options, NULL))
        fail_msg("%s", windrow_message());
    struct windrow_store *store = open_store(room);
    struct windrow_run *run;
    assert_int_equal(windrow_run_open(store, "whole", &run), WINDROW_OK);
    room->pages = windrow_store_facts(store)->pages;
    room->scores = memory_array(room->pages, sizeof(double));
    memcpy(room->scores, windrow_run_scores(run), room->pages * sizeof(double));
    windrow_run_close(run);
    windrow_store_close(store);
    *state = room;
    return 0;
}

static int tear_down(void **state)
{
    struct room *room = *state;
    scratch_remove(room->directory);
    free(room->store);
    free(room->scores);
    free(room);
    return 0;
}

/* Stops a job after some of the listener's calls. */
struct stopper {
    atomic_bool stop;
    uint32_t calls_left;
};

static void listen_and_stop(void *context, const struct windrow_progress *progress)
{
    struct stopper *stopper = context;
    (void)progress;
    if (stopper->calls_left-- == 0)
        atomic_store(&stopper->stop, true);
}

static bool has_tiles(const struct room *room, const char *name)
{
    char *path = memory_text("%s/runs/%s/tiles-index", room->store, name);
    char *third = memory_text("%s/runs/%s/tiles-core-2", room->store, name);
    bool there = scratch_exists(path);
    assert_int_equal(scratch_exists(third), there); /* three stripes or more */
    free(path);
    free(third);
    return there;
}

/* Ranks with little memory, stopped again and again; `damage`: the index of the tiles is damaged meanwhile. */
static void rank_small_with_stops(const struct room *room, const char *name, struct dice *dice, bool damage, unsigned *stops)
{
    for (int session = 0;; session++) {
        struct stopper stopper = {.calls_left = dice_below(dice, 40)};
        struct windrow_rank_options options = options_for(room, name, 9);
        options.threads = 1 + dice_below(dice, 3);
        options.checkpoint_seconds = dice_below(dice, 2) ? 0 : 300;
        /* The first session fixes the stripes; more memory later changes nothing. */
        options.memory_bytes = session % 2 ? UINT64_C(1) << 30 : SMALL_MEMORY;
        if (session == 1) /* unless nothing was saved yet */
            options.memory_bytes = SMALL_MEMORY;
        options.watch = (struct windrow_watch){.listener = listen_and_stop, .context = &stopper, .stop = &stopper.stop};
        if (session < 2)
            stopper.calls_left += 60;
        enum windrow_status status = windrow_rank(&options, NULL);
        if (status == WINDROW_OK)
            break;
        if (status != WINDROW_STOPPED || session > 1000)
            fail_msg("session %d: %d, %s", session, status, windrow_message());
        ++*stops;
        if (damage && has_tiles(room, name)) {
            char *path = memory_text("%s/runs/%s/tiles-index", room->store, name);
            scratch_damage(path, 100);
            free(path);
        }
    }
}

static void a_run_larger_than_memory_agrees_and_resumes(void **state)
{
    struct room *room = *state;
    struct dice dice = {33};
    struct windrow_rank_options options = options_for(room, "tiled", 9);
    options.memory_bytes = SMALL_MEMORY;
    if (windrow_rank(&options, NULL))
        fail_msg("%s", windrow_message());
    assert_false(has_tiles(room, "tiled")); /* only while they are needed */
    struct windrow_store *store = open_store(room);
    struct windrow_run *run;
    assert_int_equal(windrow_run_open(store, "tiled", &run), WINDROW_OK);
    const struct windrow_certificate *certificate = &windrow_run_facts(run)->certificate;
    assert_true(windrow_certificate_digits(certificate) >= 9);
    double *tiled = memory_array(room->pages, sizeof *tiled);
    memcpy(tiled, windrow_run_scores(run), room->pages * sizeof *tiled);
    /* Both are right to 9 digits, and they are not the same: other stripes, other bytes. */
    for (uint64_t page = 0; page < room->pages; page++)
        assert_true(tiled[page] - room->scores[page] < 3e-9 * tiled[page] && room->scores[page] - tiled[page] < 3e-9 * tiled[page]);
    assert_memory_not_equal(tiled, room->scores, room->pages * sizeof *tiled);
    windrow_run_close(run);
    unsigned stops = 0;
    for (int round = 0; round < 4; round++) {
        char name[24];
        snprintf(name, sizeof name, "tiled-%d", round);
        rank_small_with_stops(room, name, &dice, round == 3, &stops);
        assert_int_equal(windrow_run_open(store, name, &run), WINDROW_OK);
        assert_memory_equal(windrow_run_scores(run), tiled, room->pages * sizeof *tiled);
        windrow_run_close(run);
    }
    assert_true(stops >= 8);
    /* More digits: the tiles are made again. */
    bool already_done;
    options.digits = 11;
    assert_int_equal(windrow_rank(&options, &already_done), WINDROW_OK);
    assert_false(already_done);
    windrow_store_close(store);
    free(tiled);
}

static void note_damage(void *context, const char *damage)
{
    assert_true(strlen(damage) > 0);
    ++*(unsigned *)context;
}

static void damaged_tiles_are_found_by_reading_back(void **state)
{
    struct room *room = *state;
    struct stopper stopper = {.calls_left = 60};
    struct windrow_rank_options options = options_for(room, "hurt", 9);
    options.memory_bytes = SMALL_MEMORY;
    options.watch = (struct windrow_watch){.listener = listen_and_stop, .context = &stopper, .stop = &stopper.stop};
    assert_int_equal(windrow_rank(&options, NULL), WINDROW_STOPPED);
    struct windrow_store *store = open_store(room);
    unsigned found = 0;
    assert_int_equal(windrow_run_verify(store, "hurt", note_damage, &found), WINDROW_OK);
    static const char *const names[] = {"tiles-index", "tiles-diagonal", "tiles-core-1"};
    for (int i = 0; i < 3; i++) {
        char *path = memory_text("%s/runs/hurt/%s", room->store, names[i]);
        scratch_damage(path, 1000);
        assert_int_equal(windrow_run_verify(store, "hurt", note_damage, &found), WINDROW_NO);
        assert_int_equal(found, i + 1);
        scratch_damage(path, 1000); /* turned back */
        free(path);
    }
    assert_int_equal(windrow_run_verify(store, "hurt", note_damage, &found), WINDROW_OK);
    windrow_store_close(store);
}

static void stripes_are_fixed_by_the_first_checkpoint(void **state)
{
    struct room *room = *state;
    for (int tiled = 0; tiled < 2; tiled++) {
        struct stopper stopper = {.calls_left = 60};
        struct windrow_rank_options options = options_for(room, tiled ? "begun-small" : "begun-large", 9);
        if (tiled)
            options.memory_bytes = SMALL_MEMORY;
        options.watch = (struct windrow_watch){.listener = listen_and_stop, .context = &stopper, .stop = &stopper.stop};
        assert_int_equal(windrow_rank(&options, NULL), WINDROW_STOPPED);
        assert_int_equal(has_tiles(room, options.run), tiled);
        options.watch = (struct windrow_watch){0};
        options.memory_bytes = SMALLER_MEMORY;
        assert_int_equal(windrow_rank(&options, NULL), WINDROW_RESOURCE);
        assert_non_null(strstr(windrow_message(), "--fresh"));
        assert_non_null(strstr(windrow_message(), "--memory"));
        options.fresh = true;
        if (windrow_rank(&options, NULL))
            fail_msg("%s", windrow_message());
    }
    struct windrow_rank_options options = options_for(room, "small-power", 3);
    options.memory_bytes = SMALL_MEMORY;
    options.method = WINDROW_METHOD_POWER;
    assert_int_equal(windrow_rank(&options, NULL), WINDROW_RESOURCE);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_run_larger_than_memory_agrees_and_resumes),
        cmocka_unit_test(damaged_tiles_are_found_by_reading_back),
        cmocka_unit_test(stripes_are_fixed_by_the_first_checkpoint),
    };
    return cmocka_run_group_tests(tests, set_up, tear_down);
}
