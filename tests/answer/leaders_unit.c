/* Leaders and places against the definition, counted out page by page: two pages are in proven order when
 * their intervals do not overlap. */
#include "answer/leaders.h"

#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

#include <cmocka.h>

static uint64_t random_state = 7;

/* SplitMix64 (Steele, Lea & Flood 2014). */
static uint64_t random_next(void)
{
    uint64_t z = random_state += 0x9E3779B97F4A7C15u;
    z = (z ^ (z >> 30)) * 0xBF58476D1CE4E5B9u;
    z = (z ^ (z >> 27)) * 0x94D049BB133111EBu;
    return z ^ (z >> 31);
}

/* Intervals that rise with the score in steps and by halves, so that ends meet exactly, overlap by much,
 * by nothing, or not at all. */
struct shape {
    double relative;
    double absolute;
    double step; /* ends are rounded outwards to multiples of this; 0: not at all */
};

static void shaped_interval(const void *certificate, double score, double *low, double *high)
{
    const struct shape *shape = certificate;
    *low = score * (1 - shape->relative) - shape->absolute;
    *high = score * (1 + shape->relative) + shape->absolute;
    if (shape->step > 0) {
        *low = floor(*low / shape->step) * shape->step;
        *high = ceil(*high / shape->step) * shape->step;
    }
}

static const struct shape shapes[] = {
    {0, 0, 0}, {0.001, 0, 0}, {0.2, 0, 0}, {0, 0.01, 0}, {0.01, 0.001, 0}, {0, 0, 0.25}, {0.05, 0, 0.0625}, {0, 10, 0}};
enum { SHAPES = sizeof shapes / sizeof shapes[0] };

/* Few values mean many ties; multiples of 1/64 mean that ends of intervals meet. */
static double *random_scores(uint64_t pages, uint64_t values)
{
    double *scores = malloc((pages + 1) * sizeof *scores);
    assert_non_null(scores);
    for (uint64_t i = 0; i < pages; i++)
        scores[i] = (double)(random_next() % values) / (values > 64 ? (double)values : 64);
    return scores;
}

/* Whether the page is in the group. */
static bool holds(const struct windrow_span *spans, size_t span_count, uint64_t page)
{
    for (size_t s = 0; s < span_count; s++)
        if (page >= spans[s].first && page < spans[s].end)
            return true;
    return false;
}

struct naive {
    uint64_t place;
    struct windrow_range range;
};

static struct naive place_naively(const double *scores, uint64_t pages, const struct windrow_span *spans, size_t span_count,
                                  const struct shape *shape, uint64_t page)
{
    double low, high;
    shaped_interval(shape, scores[page], &low, &high);
    uint64_t better = 0, above = 0, below = 0, members = 0;
    for (uint64_t other = 0; other < pages; other++) {
        if (!holds(spans, span_count, other))
            continue;
        double other_low, other_high;
        shaped_interval(shape, scores[other], &other_low, &other_high);
        members++;
        better += scores[other] > scores[page] || (scores[other] == scores[page] && other < page);
        above += other_low > high;
        below += other_high < low;
    }
    return (struct naive){better + 1, {above + 1, members - below}};
}

static void leaders_have_the_places_and_ranges_of_the_definition(void **state)
{
    (void)state;
    struct windrow_leaders leaders = {0};
    for (int trial = 0; trial < 1500; trial++) {
        uint64_t pages = 1 + random_next() % 60, values = trial % 3 ? 1 + random_next() % 64 : 1 << 20;
        double *scores = random_scores(pages, values);
        struct windrow_span spans[8];
        size_t span_count = 0;
        uint64_t members = 0;
        for (uint64_t at = 0; at < pages && span_count < 8;) {
            uint64_t first = at + random_next() % 4, end = first + random_next() % 30;
            if (first >= pages)
                break;
            at = end < pages ? end : pages;
            spans[span_count++] = (struct windrow_span){first, at};
            members += at - first;
        }
        const struct shape *shape = &shapes[random_next() % SHAPES];
        struct windrow_bounds bounds = {shaped_interval, shape};
        uint64_t most = random_next() % 12;
        if (trial % 10 == 0)
            most = UINT64_MAX;
        assert_int_equal(windrow_leaders_find(scores, spans, span_count, most, &bounds, &leaders), WINDROW_OK);
        assert_int_equal(leaders.count, members < most ? members : most);
        for (uint64_t i = 0; i < leaders.count; i++) {
            struct windrow_leader leader = leaders.leaders[i];
            assert_true(holds(spans, span_count, leader.page));
            assert_true(leader.score == scores[leader.page]);
            struct naive naive = place_naively(scores, pages, spans, span_count, shape, leader.page);
            assert_int_equal(naive.place, i + 1);
            assert_int_equal(leader.range.first, naive.range.first);
            assert_int_equal(leader.range.last, naive.range.last);
            assert_in_range(naive.place, leader.range.first, leader.range.last);
        }
        free(scores);
    }
    windrow_leaders_free(&leaders);
}

static void places_in_a_crawl_are_those_of_the_definition(void **state)
{
    (void)state;
    char directory[] = "/tmp/windrow-place-XXXXXX", scores_path[64], order_path[64];
    assert_non_null(mkdtemp(directory));
    snprintf(scores_path, sizeof scores_path, "%s/scores", directory);
    snprintf(order_path, sizeof order_path, "%s/order", directory);
    for (int trial = 0; trial < 40; trial++) {
        uint64_t pages = trial % 4 ? 1 + random_next() % 300 : 1500;
        double *scores = random_scores(pages, trial % 3 ? 1 + random_next() % 64 : 1 << 20);
        assert_int_equal(windrow_file_replace(scores_path, scores, pages * sizeof *scores), WINDROW_OK);
        assert_int_equal(windrow_order_build(scores_path, 0, pages, 0, 1, order_path, NULL), WINDROW_OK);
        struct windrow_order *order;
        assert_int_equal(windrow_order_open(order_path, pages, &order), WINDROW_OK);
        struct windrow_span all = {0, pages};
        const struct shape *shape = &shapes[trial % SHAPES];
        struct windrow_bounds bounds = {shaped_interval, shape};
        struct windrow_place_memory memory = {0};
        uint64_t place;
        struct windrow_range range;
        for (uint64_t page = 0; page < pages; page++) {
            struct naive naive = place_naively(scores, pages, &all, 1, shape, page);
            assert_int_equal(windrow_place_find(order, &bounds, &memory, scores[page], page, &place, &range), WINDROW_OK);
            assert_int_equal(place, naive.place);
            assert_int_equal(range.first, naive.range.first);
            assert_int_equal(range.last, naive.range.last);
            struct windrow_range from_afar = windrow_place_range(order, &bounds, scores[page], 1 + random_next() % pages);
            assert_int_equal(from_afar.first, naive.range.first);
            assert_int_equal(from_afar.last, naive.range.last);
        }
        for (int i = 0; i < 100; i++) { /* in any order too, what is remembered must not mislead */
            uint64_t page = random_next() % pages;
            struct naive naive = place_naively(scores, pages, &all, 1, shape, page);
            assert_int_equal(windrow_place_find(order, &bounds, &memory, scores[page], page, &place, &range), WINDROW_OK);
            assert_int_equal(place, naive.place);
            assert_int_equal(range.last, naive.range.last);
        }
        assert_int_equal(windrow_place_find(order, &bounds, &memory, 1.5, 0, &place, &range), WINDROW_DAMAGED);
        windrow_place_memory_free(&memory);
        windrow_order_close(order);
        free(scores);
    }
    assert_int_equal(windrow_directory_remove(directory), WINDROW_OK);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(leaders_have_the_places_and_ranges_of_the_definition),
        cmocka_unit_test(places_in_a_crawl_are_those_of_the_definition),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
