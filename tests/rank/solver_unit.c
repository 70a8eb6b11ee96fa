/* The solver against the judge (tests/common/oracle.h) on webs in memory, whose blocks are so small that
 * waves, pieces and hosts across blocks all come up: the certificate holds, for every page, always. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "../common/examples.h"
#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/memory_web.h"
#include "../common/oracle.h"
#include "rank/solver.h"

enum { SWEEPS_MOST = 5000 };

/* A solved web. */
struct answer {
    struct memory_web *web;
    struct windrow_crew *crew;
    struct windrow_solver *solver;
    struct windrow_certificate certificate;
    double *core_jump, *rim_jump;
};

static double score_of(const struct answer *answer, uint32_t page)
{
    uint64_t number = answer->web->number[page];
    return answer->web->out_degrees[page] ? windrow_solver_core_score(answer->solver, number) : windrow_solver_rim_score(answer->solver, number);
}

struct question {
    const struct graph *graph;
    double beta;
    const long double *jump;   /* NULL: uniform */
    const uint32_t *hosts;     /* NULL: one for all */
    uint32_t block_links;
    enum windrow_method method;
    unsigned threads;
    double error;              /* to be proven */
    bool without_mixing, without_balance, without_inner_passes;
};

static struct answer begin(const struct question *question)
{
    struct answer answer = {.web = memory_web_make(question->graph, question->block_links, question->hosts)};
    uint32_t pages = question->graph->page_count;
    assert_int_equal(windrow_web_check(&answer.web->web), WINDROW_OK);
    assert_int_equal(windrow_crew_create(question->threads ? question->threads : 1, &answer.crew), WINDROW_OK);
    struct windrow_solver_options options = {.web = &answer.web->web, .crew = answer.crew, .method = question->method, .beta = question->beta,
                                             .without_mixing = question->without_mixing, .without_balance = question->without_balance,
                                             .without_inner_passes = question->without_inner_passes};
    if (question->jump) {
        answer.core_jump = memory_array(pages, sizeof(double));
        answer.rim_jump = memory_array(pages, sizeof(double));
        for (uint32_t page = 0; page < pages; page++)
            (answer.web->out_degrees[page] ? answer.core_jump : answer.rim_jump)[answer.web->number[page]] = (double)question->jump[page];
        options.core_jump = answer.core_jump;
        options.rim_jump = answer.rim_jump;
    }
    assert_int_equal(windrow_solver_create(&options, &answer.solver), WINDROW_OK);
    return answer;
}

static void certify(struct answer *answer, double error)
{
    bool complete;
    for (int sweep = 0; sweep < SWEEPS_MOST; sweep++) {
        assert_int_equal(windrow_solver_sweep(answer->solver), WINDROW_OK);
        if (windrow_solver_expected_error(answer->solver) > error)
            continue;
        assert_int_equal(windrow_solver_certify(answer->solver, error, 0, &answer->certificate, &complete), WINDROW_OK);
        if (complete && answer->certificate.error_l1 <= error)
            return;
    }
    fail_msg("not proven within %d sweeps", SWEEPS_MOST);
}

static struct answer solve(const struct question *question)
{
    struct answer answer = begin(question);
    certify(&answer, question->error);
    return answer;
}

static void answer_free(struct answer *answer)
{
    windrow_solver_destroy(answer->solver);
    windrow_crew_destroy(answer->crew);
    memory_web_free(answer->web);
    free(answer->core_jump);
    free(answer->rim_jump);
}

static long double *truth_of(const struct question *question)
{
    struct oracle_question oracle = {question->graph, (long double)question->beta, question->jump, question->jump};
    long double *truth = memory_array(question->graph->page_count, sizeof *truth);
    oracle_power(&oracle, truth);
    return truth;
}

/* Every promise of the certificate. Gives rho over the largest relative error, 0 where there is none. */
static double expect_certified(const struct answer *answer, const long double *truth, const char *what, int round)
{
    uint32_t pages = (uint32_t)answer->web->web.pages;
    const struct windrow_certificate *certificate = &answer->certificate;
    long double error_l1 = 0, worst = 0, worst_relative = 0, sum = 0;
    for (uint32_t page = 0; page < pages; page++) {
        double score = score_of(answer, page), low, high;
        long double error = fabsl(score - truth[page]);
        error_l1 += error;
        sum += score;
        worst = fmaxl(worst, error);
        if (truth[page] == 0)
            assert_true(score == 0);
        else
            worst_relative = fmaxl(worst_relative, error / truth[page]);
        windrow_certificate_interval(certificate, score, &low, &high);
        if (truth[page] < low * (1 - 1e-18L) || truth[page] > high * (1 + 1e-18L))
            fail_msg("%s, round %d, page %u: %.20Lg is outside of %.17g to %.17g", what, round, page, truth[page], low, high);
    }
    assert_true(fabsl(sum - 1) < 1e-13L);
    if (error_l1 > certificate->error_l1 || worst > certificate->alpha || worst_relative > certificate->rho)
        fail_msg("%s, round %d: errors %.3Lg %.3Lg %.3Lg exceed the proven %.3g %.3g %.3g", what, round, error_l1, worst, worst_relative,
                 certificate->error_l1, certificate->alpha, certificate->rho);
    return worst_relative > 0 ? (double)(certificate->rho / worst_relative) : 0;
}

static uint32_t *random_hosts(struct dice *dice, uint32_t pages)
{
    uint32_t *hosts = memory_array(pages, sizeof *hosts), most = 1 + dice_below(dice, 30);
    for (uint32_t page = 1; page < pages; page++)
        hosts[page] = hosts[page - 1] + (dice_below(dice, most) == 0);
    return hosts;
}

static int by_size(const void *left, const void *right)
{
    double a = *(const double *)left, b = *(const double *)right;
    return a < b ? -1 : a > b;
}

/* Ten digits, and sometimes fewer; sizes 1 to 300, a few of 2,000. */
static void certificates_hold_on_random_webs(void **state)
{
    (void)state;
    enum { ROUNDS = 3000 };
    static const double betas[] = {0.85, 0.85, 0.85, 0.5, 0.95, 0.2};
    struct dice dice = {21};
    double *ratios = memory_array(ROUNDS, sizeof *ratios);
    size_t ratio_count = 0;
    for (int round = 0; round < ROUNDS; round++) {
        uint32_t pages = 1 + dice_below(&dice, round % 50 == 49 ? 2000 : round % 3 ? 60 : 300);
        struct graph graph = graph_random(&dice, round % GRAPH_KINDS, pages, 1 + dice_below(&dice, 10));
        uint32_t *hosts = random_hosts(&dice, pages);
        struct question question = {.graph = &graph, .beta = betas[dice_below(&dice, 6)], .hosts = hosts, .block_links = 1 + dice_below(&dice, 150),
                                    .error = round % 4 ? 1e-11 : 1e-4};
        struct answer answer = solve(&question);
        long double *truth = truth_of(&question);
        double ratio = expect_certified(&answer, truth, "uniform", round);
        /* Where the error is rounding itself, tightness says nothing. */
        if (ratio > 0 && isfinite(ratio) && question.error > 1e-5)
            ratios[ratio_count++] = ratio;
        free(truth);
        answer_free(&answer);
        free(hosts);
        graph_free(&graph);
    }
    qsort(ratios, ratio_count, sizeof *ratios, by_size);
    print_message("rho is %.1f times the largest relative error in the median\n", ratios[ratio_count / 2]);
    assert_true(ratio_count > 300 && ratios[ratio_count / 2] < 20);
    free(ratios);
}

static void seed_lists_are_certified_too(void **state)
{
    (void)state;
    struct dice dice = {22};
    for (int round = 0; round < 500; round++) {
        uint32_t pages = 1 + dice_below(&dice, 150), seeds = 1 + dice_below(&dice, 5);
        struct graph graph = graph_random(&dice, round % GRAPH_KINDS, pages, 1 + dice_below(&dice, 6));
        uint32_t *hosts = random_hosts(&dice, pages);
        long double *jump = memory_array(pages, sizeof *jump);
        for (uint32_t i = 0; i < 8; i++) /* eighths, so that the sum is exactly 1 */
            jump[i < seeds ? dice_below(&dice, pages) : 0] += 0.125L;
        struct question question = {.graph = &graph, .beta = 0.85, .jump = jump, .hosts = hosts, .block_links = 1 + dice_below(&dice, 80), .error = 1e-10};
        struct answer answer = solve(&question);
        long double *truth = truth_of(&question);
        expect_certified(&answer, truth, "seeds", round);
        free(truth);
        answer_free(&answer);
        free(jump);
        free(hosts);
        graph_free(&graph);
    }
}

static void power_iteration_is_certified_too(void **state)
{
    (void)state;
    struct dice dice = {23};
    for (int round = 0; round < 200; round++) {
        uint32_t pages = 1 + dice_below(&dice, 100);
        struct graph graph = graph_random(&dice, round % GRAPH_KINDS, pages, 1 + dice_below(&dice, 6));
        struct question question = {.graph = &graph, .beta = 0.85, .block_links = 1 + dice_below(&dice, 80), .error = 1e-10, .method = WINDROW_METHOD_POWER};
        struct answer answer = solve(&question);
        long double *truth = truth_of(&question);
        expect_certified(&answer, truth, "power", round);
        /* Haveliwala & Kamvar 2003: a power sweep shrinks the change at least by beta. */
        const struct windrow_solver_state *solver = &answer.solver->state;
        for (uint64_t i = 1; i < solver->change_count; i++)
            assert_true(solver->changes[i] <= 0.85 * solver->changes[i - 1] + 1e-15);
        free(truth);
        answer_free(&answer);
        graph_free(&graph);
    }
}

/* Published examples, and closed forms, from tests/common/examples.h: those whose dangling pages jump as the
 * jump vector says, since the solver asks for nothing else. Self links stay. */
static void published_examples_come_out(void **state)
{
    (void)state;
    unsigned tried = 0;
    for (unsigned i = 0; i < example_count(); i++) {
        struct example example = example_get(i);
        size_t vector_bytes = example.graph.page_count * sizeof(long double);
        bool same = example.jump && example.dangling ? memcmp(example.jump, example.dangling, vector_bytes) == 0 : example.jump == example.dangling;
        if (example.beta < 1 && same) {
            struct question question = {.graph = &example.graph, .beta = (double)example.beta, .jump = example.jump, .block_links = 3, .error = 1e-12};
            struct answer answer = solve(&question);
            for (uint32_t page = 0; page < example.graph.page_count; page++) {
                long double score = score_of(&answer, page);
                if (fabsl(score - example.values[page].score) > example.values[page].tolerance + 1e-12L)
                    fail_msg("%s, page %u: %.15Lg, expected %.15Lg (%s)", example.name, page + 1, score, example.values[page].score, example.source);
            }
            answer_free(&answer);
            tried++;
        }
        example_free(&example);
    }
    assert_true(tried >= 8);
}

/* Webs on which something could break. */
static struct graph trap(int which)
{
    struct graph graph;
    switch (which) {
    case 0: /* one page */
        return graph_make(1);
    case 1: /* nothing but dangling pages */
        return graph_make(700);
    case 2: /* a star whose centre has more in-links than many blocks hold */
        graph = graph_make(3000);
        for (uint32_t page = 1; page < 3000; page++) {
            graph_link(&graph, page, 0);
            if (page % 7 == 0)
                graph_link(&graph, 0, page);
        }
        return graph;
    case 3: /* two closed parts */
        graph = graph_make(600);
        for (uint32_t page = 0; page < 600; page++) {
            graph_link(&graph, page, page / 300 * 300 + (page + 1) % 300);
            graph_link(&graph, page, page / 300 * 300 + (page * 7 + 3) % 300);
        }
        graph_tidy(&graph);
        return graph;
    case 4: /* a chain */
        graph = graph_make(10000);
        for (uint32_t page = 0; page + 1 < 10000; page++)
            graph_link(&graph, page, page + 1);
        return graph;
    case 5: /* a chain against the order of updates */
        graph = graph_make(10000);
        for (uint32_t page = 0; page + 1 < 10000; page++)
            graph_link(&graph, page + 1, page);
        return graph;
    case 6: /* a cycle */
        graph = graph_make(997);
        for (uint32_t page = 0; page < 997; page++)
            graph_link(&graph, page, (page + 1) % 997);
        return graph;
    case 7: /* a chain in both directions that ends in a pair */
        graph = graph_make(2000);
        for (uint32_t page = 0; page + 1 < 2000; page++) {
            graph_link(&graph, page, page + 1);
            graph_link(&graph, page + 1, page);
        }
        return graph;
    default: /* everything links to everything */
        graph = graph_make(90);
        for (uint32_t source = 0; source < 90; source++)
            for (uint32_t target = 0; target < 90; target++)
                if (source != target)
                    graph_link(&graph, source, target);
        return graph;
    }
}

static void traps_are_certified(void **state)
{
    (void)state;
    for (int which = 0; which < 9; which++)
        for (int variant = 0; variant < 4; variant++) {
            struct graph graph = trap(which);
            uint32_t *hosts = memory_array(graph.page_count, sizeof *hosts);
            for (uint32_t page = 0; page < graph.page_count; page++)
                hosts[page] = variant % 2 ? page / 10 : 0;
            struct question question = {.graph = &graph, .beta = 0.85, .hosts = hosts, .block_links = variant / 2 ? 100 : 100000, .error = 1e-11};
            struct answer answer = solve(&question);
            long double *truth = truth_of(&question);
            expect_certified(&answer, truth, "trap", 10 * which + variant);
            free(truth);
            answer_free(&answer);
            free(hosts);
            graph_free(&graph);
        }
}

/* Random webs at beta = 0.99, with all that accelerates: on some of them host balance circles for ever (these
 * seeds were searched for), so that the guard has to step in; each must still come to an end. */
static void the_guard_ends_what_circles(void **state)
{
    (void)state;
    struct dice dice = {7};
    unsigned stepped_in = 0;
    for (int round = 0; round < 120; round++) {
        uint32_t pages = 1 + dice_below(&dice, 200);
        struct graph graph = graph_random(&dice, round % GRAPH_KINDS, pages, 1 + dice_below(&dice, 8));
        uint32_t *hosts = random_hosts(&dice, pages);
        struct question question = {.graph = &graph, .beta = 0.99, .hosts = hosts, .block_links = 1 + dice_below(&dice, 60), .error = 1e-9};
        struct answer answer = solve(&question);
        long double *truth = truth_of(&question);
        expect_certified(&answer, truth, "guard", round);
        stepped_in += answer.solver->state.guard > 0;
        free(truth);
        answer_free(&answer);
        free(hosts);
        graph_free(&graph);
    }
    print_message("the guard stepped in %u times\n", stepped_in);
    assert_true(stepped_in > 0);
}

/* The same bytes for any number of threads, and whatever was switched off the same answer. */
static void threads_change_nothing(void **state)
{
    (void)state;
    struct dice dice = {24};
    for (int round = 0; round < 40; round++) {
        uint32_t pages = 200 + dice_below(&dice, 1500);
        struct graph graph = graph_random(&dice, round % GRAPH_KINDS, pages, 8);
        uint32_t *hosts = random_hosts(&dice, pages);
        struct question question = {.graph = &graph, .beta = 0.85, .hosts = hosts, .block_links = 50 + dice_below(&dice, 200), .error = 1e-10};
        struct answer one = solve(&question);
        question.threads = 2 + round % 3;
        struct answer several = solve(&question);
        for (uint32_t page = 0; page < pages; page++)
            assert_true(score_of(&one, page) == score_of(&several, page));
        assert_memory_equal(&one.certificate, &several.certificate, sizeof one.certificate);
        assert_int_equal(one.solver->state.link_visits, several.solver->state.link_visits);
        answer_free(&several);
        question.without_balance = round % 2;
        question.without_mixing = round % 3 == 0;
        question.without_inner_passes = round % 5 == 0;
        several = solve(&question);
        double apart = 0;
        for (uint32_t page = 0; page < pages; page++)
            apart += fabs(score_of(&one, page) - score_of(&several, page));
        assert_true(apart <= one.certificate.error_l1 + several.certificate.error_l1);
        answer_free(&several);
        answer_free(&one);
        free(hosts);
        graph_free(&graph);
    }
}

struct interruption {
    struct windrow_solver *solver;
    struct windrow_solver_state state;
    void *copies[WINDROW_SOLVER_VECTORS_MOST];
    struct windrow_solver_vector vectors[WINDROW_SOLVER_VECTORS_MOST];
    unsigned count;
    uint32_t waves_left;
};

static enum windrow_status interrupt(void *context)
{
    struct interruption *interruption = context;
    if (interruption->waves_left-- > 0)
        return WINDROW_OK;
    return windrow_fail(WINDROW_STOPPED, "stopped by the test");
}

/* What a checkpoint holds is enough: a sweep stopped between any two waves, its state carried into a fresh
 * solver, gives the bytes of an undisturbed one. */
static void a_saved_sweep_goes_on_to_the_same_bytes(void **state)
{
    (void)state;
    struct dice dice = {25};
    unsigned stops = 0;
    for (int round = 0; round < 60; round++) {
        uint32_t pages = 300 + dice_below(&dice, 700);
        struct graph graph = graph_random(&dice, round % GRAPH_KINDS, pages, 8);
        for (uint32_t page = 0; page < pages; page += 2) /* a list in pieces */
            graph_link(&graph, page, 17);
        graph_tidy(&graph);
        uint32_t *hosts = random_hosts(&dice, pages);
        struct question question = {.graph = &graph, .beta = 0.85, .hosts = round % 2 ? hosts : NULL, .block_links = 20 + dice_below(&dice, 60)};
        struct answer straight = begin(&question), stopped = begin(&question);
        for (int sweep = 0; sweep < 9; sweep++)
            assert_int_equal(windrow_solver_sweep(straight.solver), WINDROW_OK);
        struct interruption interruption = {.waves_left = dice_below(&dice, 8)};
        stopped.solver->options.pause = interrupt;
        stopped.solver->options.pause_context = &interruption;
        while (stopped.solver->state.sweeps < 9) {
            enum windrow_status status = windrow_solver_sweep(stopped.solver);
            if (status == WINDROW_OK)
                continue;
            assert_int_equal(status, WINDROW_STOPPED);
            stops++;
            interruption.waves_left = dice_below(&dice, 8);
            struct answer fresh = begin(&question);
            struct windrow_solver_vector from[WINDROW_SOLVER_VECTORS_MOST], to[WINDROW_SOLVER_VECTORS_MOST];
            unsigned count = windrow_solver_vectors(stopped.solver, from);
            assert_int_equal(windrow_solver_vectors(fresh.solver, to), count);
            for (unsigned v = 0; v < count; v++)
                memcpy(to[v].data, from[v].data, from[v].bytes);
            fresh.solver->state = stopped.solver->state;
            fresh.solver->options.pause = interrupt;
            fresh.solver->options.pause_context = &interruption;
            answer_free(&stopped);
            stopped = fresh;
        }
        assert_memory_equal(straight.solver->values, stopped.solver->values, straight.web->web.core_pages * sizeof(double));
        assert_memory_equal(&straight.solver->state, &stopped.solver->state, sizeof straight.solver->state);
        answer_free(&straight);
        answer_free(&stopped);
        free(hosts);
        graph_free(&graph);
    }
    assert_true(stops > 60);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(certificates_hold_on_random_webs),
        cmocka_unit_test(seed_lists_are_certified_too),
        cmocka_unit_test(power_iteration_is_certified_too),
        cmocka_unit_test(published_examples_come_out),
        cmocka_unit_test(traps_are_certified),
        cmocka_unit_test(the_guard_ends_what_circles),
        cmocka_unit_test(threads_change_nothing),
        cmocka_unit_test(a_saved_sweep_goes_on_to_the_same_bytes),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
