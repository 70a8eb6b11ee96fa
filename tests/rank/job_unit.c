/* A run on disk: stopped, resumed, refined, refused, damaged. */
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

struct room {
    char *directory;
    char *store;
    double *scores; /* of an undisturbed run to 9 digits */
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

static void expect_scores(const struct room *room, const char *name, bool same)
{
    struct windrow_store *store = open_store(room);
    struct windrow_run *run;
    assert_int_equal(windrow_run_open(store, name, &run), WINDROW_OK);
    assert_non_null(windrow_run_scores(run));
    assert_int_equal(memcmp(windrow_run_scores(run), room->scores, room->pages * sizeof(double)) == 0, same);
    windrow_run_close(run);
    windrow_store_close(store);
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
    struct graph graph = graph_random(&dice, GRAPH_NESTED, 30000, 30);
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
    struct windrow_rank_options options = options_for(room, "straight", 9);
    if (windrow_rank(&options, NULL))
        fail_msg("%s", windrow_message());
    struct windrow_store *store = open_store(room);
    struct windrow_run *run;
    assert_int_equal(windrow_run_open(store, "straight", &run), WINDROW_OK);
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

static uint64_t count_history(const struct windrow_run *run);

static void a_run_tells_what_it_did(void **state)
{
    struct room *room = *state;
    struct windrow_store *store = open_store(room);
    struct windrow_run *run;
    assert_int_equal(windrow_run_open(store, "straight", &run), WINDROW_OK);
    const struct windrow_run_facts *facts = windrow_run_facts(run);
    assert_true(facts->finished && facts->certified && !facts->working);
    assert_true(windrow_certificate_digits(&facts->certificate) >= 9);
    assert_true(facts->link_visits > windrow_store_facts(store)->core_links * (facts->sweeps - 2));
    assert_true(count_history(run) < facts->sweeps); /* certifying passes are sweeps without a line of history */
    assert_true(facts->peak_memory_bytes > 0 && facts->elapsed_seconds > 0);
    const double *scores = windrow_run_scores(run);
    const struct windrow_order *order = windrow_run_order(run);
    for (uint64_t place = 2; place <= room->pages; place++)
        assert_true(windrow_order_score(order, place - 1) >= scores[windrow_order_page(order, place)]);
    double low, high;
    windrow_run_interval(run, scores[0], &low, &high);
    assert_true(low < scores[0] && scores[0] < high && high - low < 1e-8 * scores[0]);
    windrow_run_close(run);
    windrow_store_close(store);
}

static enum windrow_status count_sweep(void *context, const struct windrow_run_sweep *sweep)
{
    uint64_t *count = context;
    assert_int_equal(sweep->sweep, ++*count);
    return WINDROW_OK;
}

static uint64_t count_history(const struct windrow_run *run)
{
    uint64_t count = 0;
    assert_int_equal(windrow_run_history(run, count_sweep, &count), WINDROW_OK);
    return count;
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

static void a_stopped_run_goes_on_to_the_same_bytes(void **state)
{
    struct room *room = *state;
    struct dice dice = {32};
    unsigned stops = 0;
    for (int round = 0; round < 6; round++) {
        char name[32];
        snprintf(name, sizeof name, "stopped-%d", round);
        for (int session = 0;; session++) {
            struct stopper stopper = {.calls_left = dice_below(&dice, 25)};
            struct windrow_rank_options options = options_for(room, name, 9);
            options.threads = 1 + dice_below(&dice, 3);
            options.checkpoint_seconds = round % 2 ? 0 : 300;
            options.watch = (struct windrow_watch){.listener = listen_and_stop, .context = &stopper, .stop = &stopper.stop};
            enum windrow_status status = windrow_rank(&options, NULL);
            if (status == WINDROW_OK)
                break;
            if (status != WINDROW_STOPPED || session > 1000)
                fail_msg("session %d: %d, %s", session, status, windrow_message());
            assert_non_null(strstr(windrow_message(), "again to go on"));
            stops++;
        }
        expect_scores(room, name, true);
    }
    assert_true(stops >= 12);
}

static void more_digits_go_on_from_where_it_is(void **state)
{
    struct room *room = *state;
    bool already_done;
    struct windrow_rank_options options = options_for(room, "refined", 3);
    assert_int_equal(windrow_rank(&options, &already_done), WINDROW_OK);
    assert_false(already_done);
    expect_scores(room, "refined", false);
    struct windrow_store *store = open_store(room);
    struct windrow_run *run;
    assert_int_equal(windrow_run_open(store, "refined", &run), WINDROW_OK);
    uint64_t sweeps = count_history(run);
    windrow_run_close(run);
    options.digits = 9;
    assert_int_equal(windrow_rank(&options, &already_done), WINDROW_OK);
    assert_false(already_done);
    assert_int_equal(windrow_run_open(store, "refined", &run), WINDROW_OK);
    assert_true(count_history(run) > sweeps);
    assert_true(windrow_certificate_digits(&windrow_run_facts(run)->certificate) >= 9);
    windrow_run_close(run);
    options.digits = 5;
    options.error = 1e-6;
    assert_int_equal(windrow_rank(&options, &already_done), WINDROW_OK);
    assert_true(already_done);
    windrow_store_close(store);
}

static void another_question_under_the_same_name_is_refused(void **state)
{
    struct room *room = *state;
    struct windrow_rank_options options = options_for(room, "straight", 9);
    options.beta = 0.9;
    assert_int_equal(windrow_rank(&options, NULL), WINDROW_USAGE);
    assert_non_null(strstr(windrow_message(), "--fresh"));
    assert_non_null(strstr(windrow_message(), "--run"));
    options.beta = 0.85;
    options.method = WINDROW_METHOD_POWER;
    assert_int_equal(windrow_rank(&options, NULL), WINDROW_USAGE);
    options.method = WINDROW_METHOD_MIXED;
    options.run = "../elsewhere";
    assert_int_equal(windrow_rank(&options, NULL), WINDROW_USAGE);
    expect_scores(room, "straight", true);
    options.run = "fresh";
    options.digits = 2;
    assert_int_equal(windrow_rank(&options, NULL), WINDROW_OK);
    options.beta = 0.5;
    options.fresh = true;
    assert_int_equal(windrow_rank(&options, NULL), WINDROW_OK);
}

/* More than double precision can prove: the best is kept, and told. */
static void too_many_digits_give_the_best_there_is(void **state)
{
    struct room *room = *state;
    struct windrow_rank_options options = options_for(room, "greedy", 15);
    assert_int_equal(windrow_rank(&options, NULL), WINDROW_RESOURCE);
    assert_non_null(strstr(windrow_message(), "digits"));
    struct windrow_store *store = open_store(room);
    struct windrow_run *run;
    assert_int_equal(windrow_run_open(store, "greedy", &run), WINDROW_OK);
    assert_true(windrow_certificate_digits(&windrow_run_facts(run)->certificate) > 10);
    assert_false(windrow_run_facts(run)->finished);
    windrow_run_close(run);
    windrow_store_close(store);
    options = options_for(room, "small", 6);
    options.memory_bytes = 1 << 10;
    assert_int_equal(windrow_rank(&options, NULL), WINDROW_RESOURCE);
    assert_non_null(strstr(windrow_message(), "--memory"));
}

static void ignore_damage(void *context, const char *damage)
{
    assert_true(strlen(damage) > 0);
    ++*(unsigned *)context;
}

static void damage_in_a_run_is_found(void **state)
{
    struct room *room = *state;
    struct windrow_store *store = open_store(room);
    char *runs = scratch_path(room->store, "runs"), *whole = scratch_path(room->directory, "whole");
    unsigned found = 0;
    assert_int_equal(windrow_run_verify(store, "straight", ignore_damage, &found), WINDROW_OK);
    assert_int_equal(found, 0);
    char *run = scratch_path(runs, "straight");
    scratch_copy(run, whole);
    struct scratch_listing listing = scratch_list(whole);
    for (size_t i = 0; i < listing.count; i++) {
        if (strstr(listing.paths[i], "ledger"))
            continue; /* LMDB's own pages: its free ones mean nothing */
        static const double places[] = {0, 0.1, 0.5, 0.999999};
        for (size_t p = 0; p < 4; p++) {
            char *path = scratch_path(run, listing.paths[i]);
            size_t offset = (size_t)(places[p] * (double)listing.file_bytes[i]);
            scratch_damage(path, offset);
            found = 0;
            assert_int_equal(windrow_run_verify(store, "straight", ignore_damage, &found), WINDROW_NO);
            assert_true(found > 0);
            scratch_damage(path, offset); /* turned back */
            free(path);
        }
    }
    assert_int_equal(windrow_run_verify(store, "straight", ignore_damage, &found), WINDROW_OK);
    scratch_listing_free(&listing);
    windrow_store_close(store);
    free(whole);
    free(run);
    free(runs);
}

/* A damaged checkpoint is no obstacle: the one before, or the beginning, leads to the same bytes. */
static void a_damaged_checkpoint_is_passed_over(void **state)
{
    struct room *room = *state;
    for (int both = 0; both < 2; both++) {
        const char *name = both ? "hurt-both" : "hurt";
        struct stopper stopper = {.calls_left = 40};
        struct windrow_rank_options options = options_for(room, name, 9);
        options.checkpoint_seconds = 0;
        options.watch = (struct windrow_watch){.listener = listen_and_stop, .context = &stopper, .stop = &stopper.stop};
        assert_int_equal(windrow_rank(&options, NULL), WINDROW_STOPPED);
        for (int file = 0; file <= both; file++) {
            char *path = memory_text("%s/runs/%s/state-%d", room->store, name, file);
            assert_true(scratch_exists(path));
            scratch_damage(path, 5000);
            free(path);
        }
        options = options_for(room, name, 9);
        assert_int_equal(windrow_rank(&options, NULL), WINDROW_OK);
        expect_scores(room, name, true);
    }
}

static enum windrow_status collect_name(void *context, const char *name)
{
    char *names = context;
    strcat(strcat(names, name), " ");
    return WINDROW_OK;
}

static void runs_are_listed(void **state)
{
    struct room *room = *state;
    struct windrow_store *store = open_store(room);
    struct windrow_run *run;
    char names[1024] = "";
    assert_int_equal(windrow_run_each(store, collect_name, names), WINDROW_OK);
    assert_non_null(strstr(names, "straight "));
    assert_null(strstr(names, "lock"));
    assert_int_equal(windrow_run_open(store, "unheard-of", &run), WINDROW_NO);
    assert_int_equal(windrow_run_open(store, "a/b", &run), WINDROW_USAGE);
    windrow_store_close(store);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_run_tells_what_it_did),
        cmocka_unit_test(a_stopped_run_goes_on_to_the_same_bytes),
        cmocka_unit_test(more_digits_go_on_from_where_it_is),
        cmocka_unit_test(another_question_under_the_same_name_is_refused),
        cmocka_unit_test(too_many_digits_give_the_best_there_is),
        cmocka_unit_test(damage_in_a_run_is_found),
        cmocka_unit_test(a_damaged_checkpoint_is_passed_over),
        cmocka_unit_test(runs_are_listed),
    };
    return cmocka_run_group_tests(tests, set_up, tear_down);
}
