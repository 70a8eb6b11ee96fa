/* Every published example and closed form that a dump can say, from dump to scores through the built
 * program. The values and their sources stand in tests/common/examples.c. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>

#include "../common/examples.h"
#include "../common/memory.h"
#include "../common/ranking.h"
#include "../common/scratch.h"

static int set_up(void **state)
{
    *state = scratch_make();
    return 0;
}

static int tear_down(void **state)
{
    scratch_remove(*state);
    return 0;
}

static void expect_example(const char *directory, unsigned number, const struct example *example)
{
    size_t page_count = example->graph.page_count;
    long double *scores = memory_array(page_count, sizeof *scores), *truth = memory_array(page_count, sizeof *truth);
    struct oracle_question question = example_question(example);
    struct certificate certificate;
    char name[32];
    snprintf(name, sizeof name, "example-%u", number);
    ranking_ask(directory, name, &example->graph, NAMING_FEW_HOSTS, (double)example->beta, "10", scores, &certificate);
    for (size_t page = 0; page < page_count; page++) {
        const struct example_value *value = &example->values[page];
        if (fabsl(scores[page] - value->score) > value->tolerance + 1e-10L * value->score)
            fail_msg("%s, page %zu: %.12Lg, expected %.12Lg (%s)", example->name, page + 1, scores[page], value->score,
                     example->source);
    }
    oracle_power(&question, truth);
    ranking_expect_certified(example->name, scores, truth, page_count, &certificate, 10);
    free(scores);
    free(truth);
}

static void test_examples(void **state)
{
    unsigned told = 0;
    for (unsigned i = 0; i < example_count(); i++) {
        struct example example = example_get(i);
        if (example.fits_dump) {
            expect_example(*state, i, &example);
            told++;
        }
        example_free(&example);
    }
    assert_true(told >= 15);
}

int main(void)
{
    const struct CMUnitTest tests[] = {cmocka_unit_test_setup_teardown(test_examples, set_up, tear_down)};
    return cmocka_run_group_tests_name("published examples through the program", tests, NULL, NULL);
}
