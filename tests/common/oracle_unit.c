/* The judge, judged: values from outside, and laws that any PageRank obeys. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <math.h>
#include <stdlib.h>

#include "examples.h"
#include "graph.h"
#include "memory.h"
#include "oracle.h"

static void expect_values(const struct example *example, const long double *scores, const char *method)
{
    for (uint32_t page = 0; page < example->graph.page_count; page++) {
        long double expected = example->values[page].score;
        if (fabsl(scores[page] - expected) > example->values[page].tolerance + 1e-17L)
            fail_msg("%s, %s, page %u: %.17Lg, expected %.17Lg (%s)", example->name, method, page + 1, scores[page],
                     expected, example->source);
    }
}

static void test_every_example(void **state)
{
    (void)state;
    for (unsigned i = 0; i < example_count(); i++) {
        struct example example = example_get(i);
        struct oracle_question question = example_question(&example);
        long double *scores = memory_array(example.graph.page_count, sizeof *scores);
        oracle_solve(&question, scores);
        expect_values(&example, scores, "elimination");
        if (example.beta < 1) {
            oracle_power(&question, scores);
            expect_values(&example, scores, "power iteration");
        }
        free(scores);
        example_free(&example);
    }
}

/* Common practice, no source: without damping a sink drains the web, and a three-cycle that is
 * entered never settles. This is why beta is below 1. */
static void test_without_damping(void **state)
{
    (void)state;
    struct graph sink = graph_make(3);
    graph_link_pairs(&sink, (const uint32_t[]){0, 1, 1, 0, 1, 2, 2, 2}, 8);
    struct graph cycle = graph_make(4);
    graph_link_pairs(&cycle, (const uint32_t[]){3, 0, 0, 1, 1, 2, 2, 0}, 8);
    struct oracle_question drained = {&sink, 1, NULL, NULL}, turning = {&cycle, 1, NULL, NULL};
    long double a[4] = {1.0L / 3, 1.0L / 3, 1.0L / 3}, b[4], start[4] = {.25L, .25L, .25L, .25L};
    for (int i = 0; i < 200; i++) {
        oracle_sweep(&drained, a, b);
        oracle_sweep(&drained, b, a);
    }
    assert_true(fabsl(a[2] - 1) < 1e-15L);
    for (int i = 0; i < 150; i++) {
        oracle_sweep(&turning, i == 0 ? start : b, a);
        oracle_sweep(&turning, a, b);
    }
    oracle_sweep(&turning, b, a);
    assert_true(oracle_distance(a, b, 4) > 0.4L);
    graph_free(&sink);
    graph_free(&cycle);
}

static void test_two_methods_agree(void **state)
{
    (void)state;
    struct dice dice = {1};
    static const long double betas[] = {0.5L, 0.85L, 0.99L};
    for (unsigned i = 0; i < 3 * GRAPH_KINDS; i++) {
        struct graph graph = graph_random(&dice, i % GRAPH_KINDS, 5 + dice_below(&dice, 60), 4);
        struct oracle_question question = {&graph, betas[i / GRAPH_KINDS], NULL, NULL};
        long double *power = memory_array(graph.page_count, sizeof *power);
        long double *solved = memory_array(graph.page_count, sizeof *solved);
        oracle_power(&question, power);
        oracle_solve(&question, solved);
        for (uint32_t page = 0; page < graph.page_count; page++)
            assert_true(fabsl(power[page] - solved[page]) <= 1e-15L * solved[page]);
        free(power);
        free(solved);
        graph_free(&graph);
    }
}

/* Haveliwala & Kamvar 2003: no second eigenvalue beyond beta. */
static void test_power_sweep_shrinks_the_residual(void **state)
{
    (void)state;
    struct dice dice = {2};
    for (unsigned kind = 0; kind < GRAPH_KINDS; kind++) {
        struct graph graph = graph_random(&dice, kind, 100, 4);
        struct oracle_question question = {&graph, 0.85L, NULL, NULL};
        long double a[100] = {1}, b[100], c[100];
        oracle_sweep(&question, a, b);
        long double before = oracle_distance(a, b, 100);
        for (int i = 0; i < 60; i++) {
            oracle_sweep(&question, b, c);
            long double after = oracle_distance(b, c, 100);
            assert_true(after <= 0.85L * before * (1 + 1e-12L) + 1e-18L);
            before = after;
            for (int page = 0; page < 100; page++)
                b[page] = c[page];
        }
        graph_free(&graph);
    }
}

/* The derivative by beta: x' = (PR_x - x)/(beta (1 - beta)), PR_x the ranking that jumps by x itself. */
static void test_derivative(void **state)
{
    (void)state;
    struct dice dice = {3};
    const long double beta = 0.85L, step = 1e-5L;
    for (unsigned kind = 0; kind < GRAPH_KINDS; kind++) {
        struct graph graph = graph_random(&dice, kind, 40, 3);
        long double *dangling = memory_array(40, sizeof *dangling);
        for (int page = 0; page < 40; page++)
            dangling[page] = 1.0L / 40;
        long double here[40], above[40], below[40], itself[40];
        oracle_solve(&(struct oracle_question){&graph, beta, NULL, dangling}, here);
        oracle_solve(&(struct oracle_question){&graph, beta + step, NULL, dangling}, above);
        oracle_solve(&(struct oracle_question){&graph, beta - step, NULL, dangling}, below);
        oracle_solve(&(struct oracle_question){&graph, beta, here, dangling}, itself);
        for (int page = 0; page < 40; page++) {
            long double formula = (itself[page] - here[page]) / (beta * (1 - beta));
            long double measured = (above[page] - below[page]) / (2 * step);
            assert_true(fabsl(formula - measured) < 1e-7L);
        }
        free(dangling);
        graph_free(&graph);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_every_example),
        cmocka_unit_test(test_without_damping),
        cmocka_unit_test(test_two_methods_agree),
        cmocka_unit_test(test_power_sweep_shrinks_the_residual),
        cmocka_unit_test(test_derivative),
    };
    return cmocka_run_group_tests_name("oracle", tests, NULL, NULL);
}
