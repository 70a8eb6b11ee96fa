/* Ranking by stripes, whose vectors lie in a file: on webs in memory with so small blocks and so narrow stripes that pieces,
 * hosts across borders and empty parts all come up. Held against the judge (tests/common/oracle.h) and against the
 * solver that has everything in memory. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <fcntl.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/memory_web.h"
#include "../common/oracle.h"
#include "../common/scratch.h"
#include "rank/solver.h"

enum { SWEEPS_MOST = 5000, FINGERPRINT = 77 };

struct question {
    const struct graph *graph;
    double beta;
    const uint32_t *hosts;
    uint32_t block_links;
    unsigned stripes;          /* 0: in memory */
    unsigned threads;
    double error;
};

struct answer {
    struct memory_web *web;
    struct windrow_crew *crew;
    struct windrow_tiles *tiles;
    struct windrow_solver *solver;
    struct windrow_certificate certificate;
    char *directory;
    int scratch;
};

/* Tests of sums need no disk that survives a crash. */
static int no_sync(int descriptor)
{
    (void)descriptor;
    return 0;
}

static int set_up(void **state)
{
    (void)state;
    windrow_files.sync = windrow_files.sync_data = no_sync;
    return 0;
}

static struct windrow_tiles *make_tiles(const struct windrow_web *web, struct windrow_crew *crew, unsigned wanted, const char *directory, uint64_t *checksum)
{
    struct windrow_stripes stripes;
    struct windrow_tiles *tiles;
    windrow_stripes_cut(web, wanted, &stripes);
    assert_true(stripes.count >= 1 && stripes.count <= wanted);
    assert_int_equal(windrow_tiles_build(web, crew, &stripes, directory, FINGERPRINT, checksum, NULL), WINDROW_OK);
    assert_int_equal(windrow_tiles_open(web, directory, FINGERPRINT, *checksum, &tiles), WINDROW_OK);
    assert_memory_equal(tiles->stripes.first_page, stripes.first_page, (stripes.count + 1) * sizeof(uint64_t));
    return tiles;
}

static struct answer begin(const struct question *question)
{
    struct answer answer = {.web = memory_web_make(question->graph, question->block_links, question->hosts), .scratch = -1};
    assert_int_equal(windrow_crew_create(question->threads ? question->threads : 1, &answer.crew), WINDROW_OK);
    if (question->stripes) {
        uint64_t checksum;
        answer.directory = scratch_make();
        answer.tiles = make_tiles(&answer.web->web, answer.crew, question->stripes, answer.directory, &checksum);
        char *path = scratch_path(answer.directory, "vectors");
        answer.scratch = open(path, O_RDWR | O_CREAT, 0666);
        assert_true(answer.scratch >= 0);
        free(path);
    }
    struct windrow_solver_options options = {.web = &answer.web->web, .crew = answer.crew, .method = WINDROW_METHOD_MIXED, .beta = question->beta,
                                             .tiles = answer.tiles, .scratch = answer.scratch};
    assert_int_equal(windrow_solver_create(&options, &answer.solver), WINDROW_OK);
    return answer;
}

static void answer_free(struct answer *answer)
{
    windrow_solver_destroy(answer->solver);
    windrow_tiles_close(answer->tiles);
    windrow_crew_destroy(answer->crew);
    memory_web_free(answer->web);
    if (answer->scratch >= 0)
        close(answer->scratch);
    if (answer->directory)
        scratch_remove(answer->directory);
}

static double score_of(const struct answer *answer, uint32_t page)
{
    uint64_t number = answer->web->number[page];
    return answer->web->out_degrees[page] ? windrow_solver_core_score(answer->solver, number) : windrow_solver_rim_score(answer->solver, number);
}

static struct answer solve(const struct question *question)
{
    struct answer answer = begin(question);
    bool complete;
    for (int sweep = 0; sweep < SWEEPS_MOST; sweep++) {
        assert_int_equal(windrow_solver_sweep(answer.solver), WINDROW_OK);
        if (windrow_solver_expected_error(answer.solver) > question->error)
            continue;
        assert_int_equal(windrow_solver_certify(answer.solver, question->error, 0, &answer.certificate, &complete), WINDROW_OK);
        if (complete && answer.certificate.error_l1 <= question->error)
            return answer;
    }
    fail_msg("not proven within %d sweeps", SWEEPS_MOST);
    return answer;
}

/* A web with a list in pieces, and hosts of random sizes. */
static struct graph random_web(struct dice *dice, int round, uint32_t pages)
{
    struct graph graph = graph_random(dice, round % GRAPH_KINDS, pages, 1 + dice_below(dice, 10));
    uint32_t popular = dice_below(dice, pages);
    for (uint32_t page = 0; page < pages && round % 2; page += 2)
        graph_link(&graph, page, popular);
    graph_tidy(&graph);
    return graph;
}

static uint32_t *random_hosts(struct dice *dice, uint32_t pages)
{
    uint32_t *hosts = memory_array(pages, sizeof *hosts), most = 1 + dice_below(dice, 60);
    for (uint32_t page = 1; page < pages; page++)
        hosts[page] = hosts[page - 1] + (dice_below(dice, most) == 0);
    return hosts;
}

/* ---- Tiles --------------------------------------------------------------------------------- */

static void read_lists(const struct windrow_web *web, enum windrow_block_kind kind, uint64_t block, struct windrow_block_reader *reader,
                       struct windrow_lists *lists)
{
    struct windrow_block decoded;
    assert_int_equal(web->read(web->context, kind, block, reader, &decoded), WINDROW_OK);
    assert_int_equal(windrow_block_lists(&decoded, web->record(web->context, kind, block), web->core_pages, lists), WINDROW_OK);
}

/* Every list of the web is the parts' lists one after another, in the order of the stripes, and each part keeps to its stripe. */
static void expect_parts_of(const struct windrow_tiles *tiles, const struct windrow_web *web, enum windrow_block_kind kind, uint64_t block)
{
    struct windrow_block_reader readers[2] = {{.decompressor = NULL}, {.decompressor = NULL}};
    struct windrow_lists whole = {.scratch = {0}}, part = {.scratch = {0}};
    uint32_t targets = web->record(web->context, kind, block)->target_count;
    uint64_t *next = memory_array(targets + 1, sizeof *next);
    read_lists(web, kind, block, &readers[0], &whole);
    const uint32_t *counts = (const void *)whole.counts.data;
    uint64_t at = 0, own_stripe = 0;
    for (uint32_t t = 0; t < targets; at += counts[t++])
        next[t] = at;
    while (kind == WINDROW_BLOCK_CORE && block >= tiles->stripes.first_block[own_stripe + 1])
        own_stripe++;
    for (unsigned stripe = 0; stripe < tiles->stripes.count; stripe++) {
        bool diagonal = kind == WINDROW_BLOCK_CORE && stripe == own_stripe;
        if (diagonal)
            assert_int_equal(tiles->columns[stripe].record(tiles->columns[stripe].context, kind, block)->link_count, 0);
        read_lists(diagonal ? &tiles->diagonal : &tiles->columns[stripe], kind, block, &readers[1], &part);
        const uint64_t *sources = (const void *)part.sources.data;
        for (uint32_t t = 0; t < targets; t++)
            for (uint32_t i = ((const uint32_t *)(const void *)part.counts.data)[t]; i > 0; i--, sources++) {
                assert_int_equal(*sources, ((const uint64_t *)(const void *)whole.sources.data)[next[t]++]);
                assert_true(*sources >= tiles->stripes.first_page[stripe] && *sources < tiles->stripes.first_page[stripe + 1]);
            }
    }
    at = 0;
    for (uint32_t t = 0; t < targets; t++)
        assert_int_equal(next[t], at += counts[t]);
    free(next);
    windrow_lists_free(&whole);
    windrow_lists_free(&part);
    windrow_block_reader_free(&readers[0]);
    windrow_block_reader_free(&readers[1]);
}

static void tiles_hold_every_link_once(void **state)
{
    (void)state;
    struct dice dice = {51};
    unsigned several = 0;
    for (int round = 0; round < 60; round++) {
        uint32_t pages = 1 + dice_below(&dice, 400);
        struct graph graph = random_web(&dice, round, pages);
        uint32_t *hosts = random_hosts(&dice, pages);
        struct question question = {.graph = &graph, .beta = 0.85, .hosts = hosts, .block_links = 1 + dice_below(&dice, 80), .stripes = 1 + dice_below(&dice, 7)};
        struct answer answer = begin(&question);
        for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
            for (uint64_t block = 0; block < answer.web->web.block_count[kind]; block++)
                expect_parts_of(answer.tiles, &answer.web->web, kind, block);
        several += answer.tiles->stripes.count > 2;
        answer_free(&answer);
        free(hosts);
        graph_free(&graph);
    }
    assert_true(several > 20);
}

static void damaged_tiles_are_found(void **state)
{
    (void)state;
    struct dice dice = {52};
    struct graph graph = graph_random(&dice, GRAPH_EVEN, 500, 8);
    struct memory_web *web = memory_web_make(&graph, 100, NULL);
    struct windrow_crew *crew;
    char *directory = scratch_make(), *index = scratch_path(directory, "tiles-index"), *column = scratch_path(directory, "tiles-core-1");
    uint64_t checksum, again;
    assert_int_equal(windrow_crew_create(1, &crew), WINDROW_OK);
    struct windrow_tiles *tiles = make_tiles(&web->web, crew, 4, directory, &checksum);
    windrow_tiles_close(tiles);
    assert_int_equal(windrow_tiles_open(&web->web, directory, FINGERPRINT + 1, checksum, &tiles), WINDROW_DAMAGED);
    size_t bytes;
    free(scratch_read(index, &bytes));
    for (size_t offset = 0; offset < bytes; offset += 41) {
        scratch_damage(index, offset);
        assert_int_equal(windrow_tiles_open(&web->web, directory, FINGERPRINT, checksum, &tiles), WINDROW_DAMAGED);
        scratch_damage(index, offset); /* turned back */
    }
    assert_int_equal(windrow_tiles_open(&web->web, directory, FINGERPRINT, checksum, &tiles), WINDROW_OK);
    scratch_damage(column, 10);
    const struct windrow_web *part = &tiles->columns[1];
    struct windrow_block_reader reader = {.decompressor = NULL};
    struct windrow_block block;
    unsigned found = 0;
    for (uint64_t b = 0; b < part->block_count[WINDROW_BLOCK_CORE]; b++)
        found += part->read(part->context, WINDROW_BLOCK_CORE, b, &reader, &block) == WINDROW_DAMAGED;
    assert_int_equal(found, 1);
    windrow_tiles_close(tiles);
    /* Made again, by another crew, they are the same. */
    windrow_crew_destroy(crew);
    assert_int_equal(windrow_crew_create(3, &crew), WINDROW_OK);
    tiles = make_tiles(&web->web, crew, 4, directory, &again);
    assert_int_equal(again, checksum);
    windrow_tiles_close(tiles);
    assert_int_equal(windrow_tiles_remove(directory), WINDROW_OK);
    assert_false(scratch_exists(index) || scratch_exists(column));
    windrow_block_reader_free(&reader);
    windrow_crew_destroy(crew);
    memory_web_free(web);
    graph_free(&graph);
    free(index);
    free(column);
    scratch_remove(directory);
}

/* ---- Ranking ------------------------------------------------------------------------------- */

static void expect_certified(const struct answer *answer, const long double *truth, int round)
{
    uint32_t pages = (uint32_t)answer->web->web.pages;
    const struct windrow_certificate *certificate = &answer->certificate;
    long double error_l1 = 0, sum = 0;
    for (uint32_t page = 0; page < pages; page++) {
        double score = score_of(answer, page), low, high;
        long double error = fabsl(score - truth[page]);
        error_l1 += error;
        sum += score;
        windrow_certificate_interval(certificate, score, &low, &high);
        if (error > certificate->alpha || error > certificate->rho * truth[page] || truth[page] < low * (1 - 1e-18L) || truth[page] > high * (1 + 1e-18L))
            fail_msg("round %d, page %u: %.20Lg is outside of %.17g to %.17g", round, page, truth[page], low, high);
    }
    assert_true(error_l1 <= certificate->error_l1);
    assert_true(fabsl(sum - 1) < 1e-13L);
}

static void certificates_hold_and_agree_with_memory(void **state)
{
    (void)state;
    static const double betas[] = {0.85, 0.85, 0.5, 0.95};
    struct dice dice = {53};
    for (int round = 0; round < 200; round++) {
        uint32_t pages = 1 + dice_below(&dice, round % 10 ? 120 : 800);
        struct graph graph = random_web(&dice, round, pages);
        uint32_t *hosts = random_hosts(&dice, pages);
        struct question question = {.graph = &graph, .beta = betas[dice_below(&dice, 4)], .hosts = hosts, .block_links = 1 + dice_below(&dice, 60),
                                    .stripes = 1 + dice_below(&dice, 8), .error = round % 4 ? 1e-11 : 1e-4};
        struct answer tiled = solve(&question);
        question.stripes = 0;
        struct answer whole = solve(&question);
        struct oracle_question oracle = {&graph, (long double)question.beta, NULL, NULL};
        long double *truth = memory_array(pages, sizeof *truth);
        oracle_power(&oracle, truth);
        expect_certified(&tiled, truth, round);
        double apart = 0;
        for (uint32_t page = 0; page < pages; page++)
            apart += fabs(score_of(&tiled, page) - score_of(&whole, page));
        assert_true(apart <= tiled.certificate.error_l1 + whole.certificate.error_l1);
        /* What was let go of comes back. */
        double before = score_of(&tiled, pages - 1);
        windrow_solver_release_all(tiled.solver);
        assert_true(score_of(&tiled, pages - 1) == before);
        free(truth);
        answer_free(&tiled);
        answer_free(&whole);
        free(hosts);
        graph_free(&graph);
    }
}

static void threads_change_nothing(void **state)
{
    (void)state;
    struct dice dice = {54};
    for (int round = 0; round < 30; round++) {
        uint32_t pages = 200 + dice_below(&dice, 1500);
        struct graph graph = random_web(&dice, round, pages);
        uint32_t *hosts = random_hosts(&dice, pages);
        struct question question = {.graph = &graph, .beta = 0.85, .hosts = hosts, .block_links = 30 + dice_below(&dice, 200), .stripes = 2 + dice_below(&dice, 5), .error = 1e-10};
        struct answer one = solve(&question);
        question.threads = 2 + round % 3;
        struct answer several = solve(&question);
        for (uint32_t page = 0; page < pages; page++)
            assert_true(score_of(&one, page) == score_of(&several, page));
        assert_memory_equal(&one.certificate, &several.certificate, sizeof one.certificate);
        assert_int_equal(one.solver->state.link_visits, several.solver->state.link_visits);
        answer_free(&several);
        answer_free(&one);
        free(hosts);
        graph_free(&graph);
    }
}

static enum windrow_status interrupt(void *context)
{
    uint32_t *waves_left = context;
    if ((*waves_left)-- > 0)
        return WINDROW_OK;
    return windrow_fail(WINDROW_STOPPED, "stopped by the test");
}

/* A sweep stopped anywhere, its state carried into a fresh solver, gives the bytes of an undisturbed one. */
static void a_saved_sweep_goes_on_to_the_same_bytes(void **state)
{
    (void)state;
    struct dice dice = {55};
    unsigned stops = 0;
    for (int round = 0; round < 20; round++) {
        uint32_t pages = 300 + dice_below(&dice, 700), waves_left = dice_below(&dice, 20);
        struct graph graph = random_web(&dice, round, pages);
        uint32_t *hosts = random_hosts(&dice, pages);
        struct question question = {.graph = &graph, .beta = 0.85, .hosts = hosts, .block_links = 20 + dice_below(&dice, 60), .stripes = 2 + dice_below(&dice, 4)};
        struct answer straight = begin(&question), stopped = begin(&question);
        for (int sweep = 0; sweep < 9; sweep++)
            assert_int_equal(windrow_solver_sweep(straight.solver), WINDROW_OK);
        stopped.solver->options.pause = interrupt;
        stopped.solver->options.pause_context = &waves_left;
        while (stopped.solver->state.sweeps < 9) {
            enum windrow_status status = windrow_solver_sweep(stopped.solver);
            if (status == WINDROW_OK)
                continue;
            assert_int_equal(status, WINDROW_STOPPED);
            stops++;
            struct answer fresh = begin(&question);
            struct windrow_solver_vector from[WINDROW_SOLVER_VECTORS_MOST], to[WINDROW_SOLVER_VECTORS_MOST];
            unsigned count = windrow_solver_vectors(stopped.solver, from);
            assert_int_equal(windrow_solver_vectors(fresh.solver, to), count);
            for (unsigned v = 0; v < count; v++)
                memcpy(to[v].data, from[v].data, from[v].bytes);
            fresh.solver->state = stopped.solver->state;
            fresh.solver->options.pause = interrupt;
            fresh.solver->options.pause_context = &waves_left;
            answer_free(&stopped);
            stopped = fresh;
            waves_left = dice_below(&dice, 30);
        }
        assert_memory_equal(straight.solver->values, stopped.solver->values, straight.web->web.core_pages * sizeof(double));
        /* Links are visited again to find a stripe's inflow again. */
        assert_true(stopped.solver->state.link_visits >= straight.solver->state.link_visits);
        stopped.solver->state.link_visits = straight.solver->state.link_visits;
        assert_memory_equal(&straight.solver->state, &stopped.solver->state, sizeof straight.solver->state);
        answer_free(&straight);
        answer_free(&stopped);
        free(hosts);
        graph_free(&graph);
    }
    assert_true(stops > 40);
}

/* ---- Memory -------------------------------------------------------------------------------- */

/* A figure of /proc/self/status in bytes. */
static uint64_t memory_figure(const char *name)
{
    char line[256];
    unsigned long long kibibytes = 0;
    FILE *file = fopen("/proc/self/status", "r");
    assert_non_null(file);
    while (fgets(line, sizeof line, file))
        if (!strncmp(line, name, strlen(name)))
            sscanf(line + strlen(name), ": %llu", &kibibytes);
    fclose(file);
    return kibibytes * 1024;
}

/* The peak of resident memory begins anew (proc(5), clear_refs). */
static bool forget_peak(void)
{
    FILE *file = fopen("/proc/self/clear_refs", "w");
    return file && fputs("5", file) >= 0 && fclose(file) == 0;
}

/* Sweeps and certificates keep no more in memory than some stripes' worth of the vectors. */
static void little_of_the_vectors_is_in_memory(void **state)
{
    (void)state;
    enum { HALF_MILLION = 500000 };
    struct dice dice = {56};
    struct graph graph = graph_random(&dice, GRAPH_EVEN, HALF_MILLION, 2);
    uint32_t *hosts = memory_array(HALF_MILLION, sizeof *hosts);
    for (uint32_t page = 0; page < HALF_MILLION; page++)
        hosts[page] = page / 20;
    struct question question = {.graph = &graph, .beta = 0.85, .hosts = hosts, .block_links = 4000, .stripes = 10};
    struct answer answer = begin(&question);
    uint64_t vectors = windrow_solver_memory_bytes(&answer.web->web);
    windrow_solver_release_all(answer.solver);
    if (forget_peak()) {
        uint64_t before = memory_figure("VmRSS");
        bool complete;
        for (int sweep = 0; sweep < 4; sweep++)
            assert_int_equal(windrow_solver_sweep(answer.solver), WINDROW_OK);
        assert_int_equal(windrow_solver_certify(answer.solver, 0, 0, &answer.certificate, &complete), WINDROW_OK);
        assert_true(complete);
        uint64_t more = memory_figure("VmHWM") - before;
        print_message("%.1f MiB of vectors, of which sweeps took %.1f MiB at most\n", (double)vectors / (1 << 20), (double)more / (1 << 20));
#ifndef __SANITIZE_ADDRESS__ /* which keeps memory that was given back */
        assert_true(more < vectors / 3);
#endif
    }
    answer_free(&answer);
    free(hosts);
    graph_free(&graph);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(tiles_hold_every_link_once),
        cmocka_unit_test(damaged_tiles_are_found),
        cmocka_unit_test(certificates_hold_and_agree_with_memory),
        cmocka_unit_test(threads_change_nothing),
        cmocka_unit_test(a_saved_sweep_goes_on_to_the_same_bytes),
        cmocka_unit_test(little_of_the_vectors_is_in_memory),
    };
    return cmocka_run_group_tests(tests, set_up, NULL);
}
