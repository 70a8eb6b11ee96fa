/* The kernel's sums against sums written plainly: the same bytes where the order is fixed, the right
 * links everywhere; and blocks that lie are told from good ones before anything is read outside. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/memory_web.h"
#include "sweep/kernel.h"

static double random_value(struct dice *dice)
{
    return ldexp((double)(dice_next(dice) >> 11) + 1, -53 - (int)dice_below(dice, 20));
}

static uint32_t *random_hosts(struct dice *dice, uint32_t page_count)
{
    uint32_t *hosts = memory_array(page_count, sizeof *hosts), most = 1 + dice_below(dice, 40);
    for (uint32_t page = 1; page < page_count; page++)
        hosts[page] = hosts[page - 1] + (dice_below(dice, most) == 0);
    return hosts;
}

/* One chunk as the kernel's header tells it. */
static double plain_chunk(const double *values, const uint64_t *ids, uint64_t count)
{
    double lanes[4] = {0};
    for (uint64_t i = 0; i < count; i++)
        lanes[i % 4] += values[ids[i]];
    return (lanes[0] + lanes[1]) + (lanes[2] + lanes[3]);
}

static void each_block(const struct memory_web *web, void (*check)(const struct memory_web *web, struct windrow_kernel *kernel,
                                                                   const uint64_t *sources, const uint32_t *counts, struct dice *dice),
                       struct dice *dice)
{
    struct windrow_kernel kernel = {0};
    struct windrow_lists lists = {0};
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
        for (uint64_t block = 0; block < web->web.block_count[kind]; block++) {
            struct windrow_block_reader reader = {0};
            struct windrow_block parsed;
            const struct windrow_block_record *record = web->web.record(web, kind, block);
            assert_int_equal(web->web.read(web, kind, block, &reader, &parsed), WINDROW_OK);
            assert_int_equal(windrow_kernel_load(&kernel, &parsed, record), WINDROW_OK);
            assert_int_equal(windrow_block_lists(&parsed, record, web->web.core_pages, &lists), WINDROW_OK);
            check(web, &kernel, (const uint64_t *)(const void *)lists.sources.data, (const uint32_t *)(const void *)lists.counts.data, dice);
        }
    windrow_kernel_free(&kernel);
    windrow_lists_free(&lists);
}

static void check_sums(const struct memory_web *web, struct windrow_kernel *kernel, const uint64_t *sources, const uint32_t *counts, struct dice *dice)
{
    uint64_t core_pages = web->web.core_pages;
    uint32_t targets = kernel->block.target_count, run = 0;
    double *values = memory_array(core_pages, sizeof *values), *sums = memory_array(targets, sizeof *sums);
    for (uint64_t i = 0; i < core_pages; i++)
        values[i] = random_value(dice);
    assert_int_equal(windrow_kernel_gather(kernel, values, core_pages, NULL), WINDROW_OK);
    assert_int_equal(windrow_kernel_sums(kernel, values, core_pages, sums), WINDROW_OK);
    for (uint32_t t = 0; t < targets; t++) {
        long double sum = 0;
        for (uint32_t i = 0; i < counts[t]; i++)
            sum += values[sources[i]];
        if (fabsl(sums[t] - sum) > windrow_kernel_roundings(counts[t]) * 0x1p-53L * sum)
            fail_msg("target %u: %.17g instead of %.17Lg", t, sums[t], sum);
        assert_int_equal(windrow_kernel_links(kernel, t, &run), counts[t]);
        bool all_far = kernel->near_counts.count == 0 && kernel->run_counts.count == 0;
        if (all_far && counts[t] > 0 && counts[t] <= WINDROW_CHUNK_LINKS)
            assert_true(sums[t] == plain_chunk(values, sources, counts[t]));
        sources += counts[t];
    }
    free(values);
    free(sums);
}

static void sums_are_over_the_right_links(void **state)
{
    (void)state;
    struct dice dice = {11};
    for (int round = 0; round < 300; round++) {
        uint32_t pages = 1 + dice_below(&dice, 300);
        struct graph graph = graph_random(&dice, round % GRAPH_KINDS, pages, 1 + dice_below(&dice, 30));
        uint32_t *hosts = random_hosts(&dice, pages);
        struct memory_web *web = memory_web_make(&graph, 1 + dice_below(&dice, 200), hosts);
        each_block(web, check_sums, &dice);
        memory_web_free(web);
        free(hosts);
        graph_free(&graph);
    }
}

/* Lists of several chunks: every page links to page 0, odd ones to page 1 too. */
static void long_lists_are_summed_in_chunks(void **state)
{
    (void)state;
    struct dice dice = {12};
    struct graph graph = graph_make(9000);
    for (uint32_t page = 1; page < graph.page_count; page++) {
        graph_link(&graph, page, 0);
        if (page % 2 && page > 1)
            graph_link(&graph, page, 1);
    }
    graph_tidy(&graph);
    uint32_t *hosts = memory_array(graph.page_count, sizeof *hosts);
    for (uint32_t page = 0; page < graph.page_count; page++)
        hosts[page] = page;
    static const uint32_t block_links[] = {100000, 5000, 1000};
    for (int i = 0; i < 3; i++)
        for (int one_host = 0; one_host < 2; one_host++) {
            struct memory_web *web = memory_web_make(&graph, block_links[i], one_host ? NULL : hosts);
            assert_int_equal(windrow_web_check(&web->web), WINDROW_OK);
            each_block(web, check_sums, &dice);
            memory_web_free(web);
        }
    free(hosts);
    graph_free(&graph);
}

static void check_relaxation(const struct memory_web *web, struct windrow_kernel *kernel, const uint64_t *sources, const uint32_t *counts, struct dice *dice)
{
    uint64_t core_pages = web->web.core_pages, first = kernel->block.first_target;
    uint32_t targets = kernel->block.target_count;
    const struct windrow_block_record *core = web->records[WINDROW_BLOCK_CORE];
    if (kernel->block.flags & WINDROW_BLOCK_PIECE || kernel->record < core || kernel->record >= core + web->web.block_count[WINDROW_BLOCK_CORE])
        return; /* rim blocks and pieces are not relaxed */
    double *values = memory_array(core_pages, sizeof *values), *mine = memory_array(targets, sizeof *mine);
    long double *expected = memory_array(targets, sizeof *expected);
    for (uint64_t i = 0; i < core_pages; i++)
        values[i] = random_value(dice);
    memcpy(mine, values + first, targets * sizeof *mine);
    for (uint32_t t = 0; t < targets; t++)
        expected[t] = mine[t];
    /* Near sources are those of the same host in the block; the others keep their values. */
    uint64_t host = 0;
    for (uint32_t t = 0; t < targets; t++) {
        long double sum = 0;
        while (web->host_firsts[host + 1] <= first + t)
            host++;
        for (uint32_t i = 0; i < counts[t]; i++, sources++) {
            bool near = *sources >= web->host_firsts[host] && *sources < web->host_firsts[host + 1] && *sources >= first && *sources < first + targets;
            sum += near ? expected[*sources - first] : values[*sources];
        }
        expected[t] = (0.01L + 0.85L * sum) / web->degrees[first + t];
    }
    struct windrow_relaxation relaxation = {.beta = 0.85, .jump = 0.01, .degrees = web->degrees + first};
    assert_int_equal(windrow_kernel_gather(kernel, values, core_pages, NULL), WINDROW_OK);
    struct windrow_near_cursor cursor = windrow_kernel_near_begin(kernel, mine), middle;
    uint32_t cut = dice_below(dice, targets + 1);
    double change, total = 0;
    assert_int_equal(windrow_kernel_relax(kernel, &relaxation, &cursor, 0, cut, mine, &change), WINDROW_OK);
    total += change;
    middle = cursor;
    assert_int_equal(windrow_kernel_relax(kernel, &relaxation, &cursor, cut, targets, mine, &change), WINDROW_OK);
    total += change;
    double expected_change = 0;
    for (uint32_t t = 0; t < targets; t++) {
        assert_true(fabsl(mine[t] - expected[t]) <= 1e-13L * expected[t]);
        expected_change += fabs(mine[t] - values[first + t]) * web->degrees[first + t];
    }
    assert_true(fabs(total - expected_change) <= 1e-12 * (expected_change + 1));
    /* From a copy of the cursor the second part can be updated again, and its targets alone change. */
    double *again = memory_array(targets, sizeof *again);
    memcpy(again, mine, targets * sizeof *again);
    middle.values = again;
    assert_int_equal(windrow_kernel_relax(kernel, &relaxation, &middle, cut, targets, again, &change), WINDROW_OK);
    assert_memory_equal(again, mine, cut * sizeof *again);
    free(again);
    free(values);
    free(mine);
    free(expected);
}

static void relaxation_reads_near_values_in_place(void **state)
{
    (void)state;
    struct dice dice = {13};
    for (int round = 0; round < 300; round++) {
        uint32_t pages = 1 + dice_below(&dice, 200);
        struct graph graph = graph_random(&dice, round % GRAPH_KINDS, pages, 1 + dice_below(&dice, 30));
        uint32_t *hosts = random_hosts(&dice, pages);
        struct memory_web *web = memory_web_make(&graph, 1 + dice_below(&dice, 300), hosts);
        each_block(web, check_relaxation, &dice);
        memory_web_free(web);
        free(hosts);
        graph_free(&graph);
    }
}

/* A changed byte gives damage or another good block, never a read outside (which the sanitizer would see). */
static void lying_blocks_do_no_harm(void **state)
{
    (void)state;
    struct dice dice = {14};
    unsigned damaged = 0;
    struct windrow_kernel kernel = {0};
    for (int round = 0; round < 3000; round++) {
        uint32_t pages = 20 + dice_below(&dice, 60);
        struct graph graph = graph_random(&dice, round % GRAPH_KINDS, pages, 10);
        struct memory_web *web = memory_web_make(&graph, 10000, NULL);
        uint64_t core_pages = web->web.core_pages;
        double *values = memory_array(core_pages, sizeof *values), *mine = memory_array(core_pages, sizeof *mine);
        if (web->web.block_count[WINDROW_BLOCK_CORE] == 1) {
            struct windrow_buffer *payload = web->payloads[WINDROW_BLOCK_CORE];
            const struct windrow_block_record *record = web->records[WINDROW_BLOCK_CORE];
            for (int hit = 0; hit < 2; hit++)
                payload->data[16 + dice_below(&dice, (uint32_t)payload->bytes - 16)] ^= (uint8_t)(1u << dice_below(&dice, 8));
            struct windrow_relaxation relaxation = {.beta = 0.85, .jump = 0.01, .degrees = web->degrees};
            struct windrow_block block;
            double change;
            enum windrow_status status = windrow_block_parse(payload->data, payload->bytes, record, &block);
            if (!status)
                status = windrow_kernel_load(&kernel, &block, record);
            if (!status)
                status = windrow_kernel_gather(&kernel, values, core_pages, NULL);
            if (!status)
                status = windrow_kernel_sums(&kernel, values, core_pages, mine);
            if (!status) {
                struct windrow_near_cursor cursor = windrow_kernel_near_begin(&kernel, mine);
                status = windrow_kernel_relax(&kernel, &relaxation, &cursor, 0, record->target_count, mine, &change);
            }
            assert_true(status == WINDROW_OK || status == WINDROW_DAMAGED);
            damaged += status == WINDROW_DAMAGED;
        }
        free(values);
        free(mine);
        memory_web_free(web);
        graph_free(&graph);
    }
    assert_true(damaged > 500);
    windrow_kernel_free(&kernel);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(sums_are_over_the_right_links),
        cmocka_unit_test(long_lists_are_summed_in_chunks),
        cmocka_unit_test(relaxation_reads_near_values_in_place),
        cmocka_unit_test(lying_blocks_do_no_harm),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
