/* The order against a plain sort: same places for any memory, threads and number of ties; searches
 * against counting; damage found. */
#include "rank/order.h"

#include <errno.h>
#include <fcntl.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

#include <cmocka.h>

static char directory[] = "/tmp/windrow-order-XXXXXX";
static char scores_path[64], order_path[64];

static int make_directory(void **state)
{
    (void)state;
    if (!mkdtemp(directory))
        return 1;
    snprintf(scores_path, sizeof scores_path, "%s/scores", directory);
    snprintf(order_path, sizeof order_path, "%s/order", directory);
    return 0;
}

static int remove_directory(void **state)
{
    (void)state;
    return windrow_directory_remove(directory) != WINDROW_OK;
}

static uint64_t random_state = 1;

/* SplitMix64 (Steele, Lea & Flood 2014). */
static uint64_t random_next(void)
{
    uint64_t z = random_state += 0x9E3779B97F4A7C15u;
    z = (z ^ (z >> 30)) * 0xBF58476D1CE4E5B9u;
    z = (z ^ (z >> 27)) * 0x94D049BB133111EBu;
    return z ^ (z >> 31);
}

/* Scores over many magnitudes; out of `values` different ones, so that few values mean many ties. */
static double *random_scores(uint64_t pages, uint64_t values)
{
    double *scores = malloc((pages + 1) * sizeof *scores);
    double *choice = malloc(values * sizeof *choice);
    assert_true(scores && choice);
    for (uint64_t i = 0; i < values; i++)
        choice[i] = i ? ldexp((double)(random_next() >> 11), -53 - (int)(random_next() % 40)) : 0;
    for (uint64_t i = 0; i < pages; i++)
        scores[i] = choice[random_next() % values];
    free(choice);
    return scores;
}

static const uint64_t scores_offset = 64;

static void write_scores(const double *scores, uint64_t pages)
{
    static const char header[64];
    struct windrow_writer writer;
    assert_int_equal(windrow_writer_open(&writer, scores_path, false), WINDROW_OK);
    assert_int_equal(windrow_writer_append(&writer, header, scores_offset), WINDROW_OK);
    assert_int_equal(windrow_writer_append(&writer, scores, pages * sizeof *scores), WINDROW_OK);
    assert_int_equal(windrow_writer_close(&writer), WINDROW_OK);
}

static const double *compared_scores;

static int compare_pages(const void *left, const void *right)
{
    uint64_t a = *(const uint64_t *)left, b = *(const uint64_t *)right;
    if (compared_scores[a] != compared_scores[b])
        return compared_scores[a] > compared_scores[b] ? -1 : 1;
    return a < b ? -1 : a > b;
}

static uint64_t *plain_order(const double *scores, uint64_t pages)
{
    uint64_t *ids = malloc((pages + 1) * sizeof *ids);
    assert_non_null(ids);
    for (uint64_t i = 0; i < pages; i++)
        ids[i] = i;
    compared_scores = scores;
    qsort(ids, pages, sizeof *ids, compare_pages);
    return ids;
}

static bool exceeds(const void *context, double score)
{
    return score > *(const double *)context;
}

static void check_searches(const struct windrow_order *order, const double *scores, uint64_t pages)
{
    for (int trial = 0; trial < 40; trial++) {
        double wanted = scores[random_next() % pages];
        if (trial % 4 == 1)
            wanted = nextafter(wanted, 2);
        if (trial % 4 == 2)
            wanted = nextafter(wanted, 0);
        uint64_t above = 0, reaching = 0;
        for (uint64_t i = 0; i < pages; i++) {
            above += scores[i] > wanted;
            reaching += scores[i] >= wanted;
        }
        assert_int_equal(windrow_order_above(order, wanted), above);
        assert_int_equal(windrow_order_reaching(order, wanted), reaching);
        for (int start = 0; start < 20; start++)
            assert_int_equal(windrow_order_count(order, exceeds, &wanted, 1 + random_next() % pages), above);
        assert_int_equal(windrow_order_count(order, exceeds, &wanted, 1), above);
        assert_int_equal(windrow_order_count(order, exceeds, &wanted, pages), above);
    }
    double everything = -1, nothing = 3;
    assert_int_equal(windrow_order_count(order, exceeds, &everything, 1 + random_next() % pages), pages);
    assert_int_equal(windrow_order_count(order, exceeds, &nothing, 1 + random_next() % pages), 0);
}

static void places_are_those_of_a_plain_sort(void **state)
{
    (void)state;
    /* 1 MiB sorts 32,768 pages at a time: from one run to several, whole and broken strides. */
    static const struct { uint64_t pages, values; } cases[] = {
        {1, 1}, {2, 2}, {511, 1000}, {512, 3}, {513, 600}, {5000, 1}, {20000, 1u << 20}, {100001, 7}, {150000, 1u << 20}};
    for (size_t c = 0; c < sizeof cases / sizeof cases[0]; c++) {
        uint64_t pages = cases[c].pages;
        double *scores = random_scores(pages, cases[c].values);
        uint64_t *ids = plain_order(scores, pages);
        write_scores(scores, pages);
        uint64_t first_bytes = 0, first_checksum = 0;
        static const struct { uint64_t memory; unsigned threads; } budgets[] = {{1u << 20, 1}, {2u << 20, 2}, {64u << 20, 3}};
        for (size_t b = 0; b < sizeof budgets / sizeof budgets[0]; b++) {
            assert_int_equal(windrow_order_build(scores_path, scores_offset, pages, budgets[b].memory, budgets[b].threads, order_path, NULL), WINDROW_OK);
            uint64_t bytes, checksum;
            assert_int_equal(windrow_file_checksum(order_path, &bytes, &checksum), WINDROW_OK);
            if (b) {
                assert_int_equal(bytes, first_bytes);
                assert_int_equal(checksum, first_checksum);
            }
            first_bytes = bytes;
            first_checksum = checksum;
        }
        struct windrow_order *order;
        assert_int_equal(windrow_order_open(order_path, pages, &order), WINDROW_OK);
        assert_int_equal(windrow_order_pages(order), pages);
        for (uint64_t place = 1; place <= pages; place++) {
            uint64_t page = ids[place - 1];
            assert_int_equal(windrow_order_page(order, place), page);
            assert_true(windrow_order_score(order, place) == scores[page]);
        }
        for (int trial = 0; trial < 200; trial++) {
            uint64_t place = 1 + random_next() % pages;
            assert_int_equal(windrow_order_place(order, scores[ids[place - 1]], ids[place - 1]), place);
        }
        assert_int_equal(windrow_order_place(order, scores[0], pages), 0);
        check_searches(order, scores, pages);
        assert_int_equal(windrow_order_verify(order, scores), WINDROW_OK);
        scores[pages / 2] += 1e-3;
        assert_int_equal(windrow_order_verify(order, scores), WINDROW_DAMAGED);
        windrow_order_close(order);
        free(scores);
        free(ids);
    }
}

static void nothing_but_the_order_is_left(void **state)
{
    (void)state;
    char path[80];
    assert_true(windrow_file_exists(order_path));
    snprintf(path, sizeof path, "%s.new", order_path);
    assert_false(windrow_file_exists(path));
    snprintf(path, sizeof path, "%s.sort", order_path);
    assert_false(windrow_file_exists(path));
}

static void a_store_without_pages_has_an_order(void **state)
{
    (void)state;
    double none = 0;
    write_scores(&none, 0);
    assert_int_equal(windrow_order_build(scores_path, scores_offset, 0, 0, 4, order_path, NULL), WINDROW_OK);
    struct windrow_order *order;
    assert_int_equal(windrow_order_open(order_path, 0, &order), WINDROW_OK);
    assert_int_equal(windrow_order_above(order, 0.5), 0);
    assert_int_equal(windrow_order_place(order, 0.5, 0), 0);
    assert_int_equal(windrow_order_verify(order, &none), WINDROW_OK);
    windrow_order_close(order);
}

static void impossible_scores_are_refused(void **state)
{
    (void)state;
    const double impossible[] = {-1e-300, NAN, INFINITY, -INFINITY};
    for (size_t i = 0; i < sizeof impossible / sizeof impossible[0]; i++) {
        double scores[3] = {0.5, impossible[i], 0.5};
        write_scores(scores, 3);
        windrow_file_remove(order_path);
        assert_int_equal(windrow_order_build(scores_path, scores_offset, 3, 0, 1, order_path, NULL), WINDROW_DAMAGED);
        assert_non_null(strstr(windrow_message(), "page 1"));
        assert_false(windrow_file_exists(order_path));
    }
    double scores[2] = {0.5, 0.5};
    write_scores(scores, 2);
    assert_int_equal(windrow_order_build(scores_path, scores_offset, 3, 0, 1, order_path, NULL), WINDROW_DAMAGED);
    assert_false(windrow_file_exists(order_path));
}

static void a_wish_to_stop_leaves_nothing(void **state)
{
    (void)state;
    double scores[2] = {0.5, 0.5};
    write_scores(scores, 2);
    windrow_file_remove(order_path);
    atomic_bool stop = true;
    struct windrow_watch watch = {.stop = &stop};
    struct windrow_meter meter;
    windrow_meter_start(&meter, &watch);
    assert_int_equal(windrow_order_build(scores_path, scores_offset, 2, 0, 1, order_path, &meter), WINDROW_STOPPED);
    windrow_meter_finish(&meter);
    assert_false(windrow_file_exists(order_path));
}

static int failing_call_countdown;

static ssize_t failing_write_at(int descriptor, const void *bytes, size_t count, off_t offset)
{
    if (failing_call_countdown-- == 0) {
        errno = ENOSPC;
        return -1;
    }
    return pwrite(descriptor, bytes, count, offset);
}

static int failing_sync(int descriptor)
{
    (void)descriptor;
    errno = EIO;
    return -1;
}

static int failing_reserve(int descriptor, off_t offset, off_t bytes)
{
    (void)descriptor;
    (void)offset;
    (void)bytes;
    return ENOSPC;
}

static void a_full_disk_is_said_and_leaves_nothing(void **state)
{
    (void)state;
    double *scores = random_scores(3000, 100);
    write_scores(scores, 3000);
    windrow_file_remove(order_path);
    struct windrow_file_functions before = windrow_files;
    windrow_files.write_at = failing_write_at;
    int calls;
    for (calls = 0; calls < 100; calls++) {
        failing_call_countdown = calls;
        enum windrow_status status = windrow_order_build(scores_path, scores_offset, 3000, 0, 1, order_path, NULL);
        if (status == WINDROW_OK)
            break;
        assert_int_equal(status, WINDROW_RESOURCE);
        assert_false(windrow_file_exists(order_path));
    }
    windrow_files = before;
    assert_in_range(calls, 5, 99); /* the runs, three sections and the header were each made to fail */
    nothing_but_the_order_is_left(NULL);
    free(scores);
}

static void a_failing_sync_or_reservation_is_said(void **state)
{
    (void)state;
    double scores[2] = {0.25, 0.75};
    write_scores(scores, 2);
    windrow_file_remove(order_path);
    struct windrow_file_functions before = windrow_files;
    windrow_files.sync_data = failing_sync;
    assert_int_equal(windrow_order_build(scores_path, scores_offset, 2, 0, 1, order_path, NULL), WINDROW_RESOURCE);
    assert_false(windrow_file_exists(order_path));
    windrow_files = before;
    windrow_files.reserve = failing_reserve;
    assert_int_equal(windrow_order_build(scores_path, scores_offset, 2, 0, 1, order_path, NULL), WINDROW_RESOURCE);
    assert_false(windrow_file_exists(order_path));
    windrow_files = before;
}

/* Every byte of a small order is turned over: opening or verifying must notice, whichever it is. */
static void every_damaged_byte_is_found(void **state)
{
    (void)state;
    enum { PAGES = 5 };
    double scores[PAGES] = {0.1, 0.3, 0.1, 0.4, 0.1};
    write_scores(scores, PAGES);
    assert_int_equal(windrow_order_build(scores_path, scores_offset, PAGES, 0, 1, order_path, NULL), WINDROW_OK);
    struct windrow_buffer whole = {0};
    assert_int_equal(windrow_file_load(order_path, 1 << 20, &whole), WINDROW_OK);
    struct windrow_order *order;
    unsigned unnoticed = 0;
    for (size_t at = 0; at < whole.bytes; at++) {
        whole.data[at] ^= 0x10;
        assert_int_equal(windrow_file_replace(order_path, whole.data, whole.bytes), WINDROW_OK);
        whole.data[at] ^= 0x10;
        enum windrow_status status = windrow_order_open(order_path, PAGES, &order);
        if (!status) {
            status = windrow_order_verify(order, scores);
            windrow_order_close(order);
        }
        if (status)
            assert_int_equal(status, WINDROW_DAMAGED);
        else
            unnoticed++;
        if (at == 64 + PAGES * 4) /* the gap up to byte 4096 holds nothing */
            at = 4095;
    }
    assert_int_equal(unnoticed, 1); /* the one byte of the gap that was tried */
    for (size_t bytes = 0; bytes < whole.bytes; bytes += bytes < 80 || bytes > 4080 ? 1 : 500) {
        assert_int_equal(windrow_file_replace(order_path, whole.data, bytes), WINDROW_OK);
        assert_int_equal(windrow_order_open(order_path, PAGES, &order), WINDROW_DAMAGED);
        assert_null(order);
    }
    assert_int_equal(windrow_file_replace(order_path, whole.data, whole.bytes), WINDROW_OK);
    assert_int_equal(windrow_order_open(order_path, PAGES + 1, &order), WINDROW_DAMAGED);
    windrow_buffer_free(&whole);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(places_are_those_of_a_plain_sort),
        cmocka_unit_test(nothing_but_the_order_is_left),
        cmocka_unit_test(a_store_without_pages_has_an_order),
        cmocka_unit_test(impossible_scores_are_refused),
        cmocka_unit_test(a_wish_to_stop_leaves_nothing),
        cmocka_unit_test(a_full_disk_is_said_and_leaves_nothing),
        cmocka_unit_test(a_failing_sync_or_reservation_is_said),
        cmocka_unit_test(every_damaged_byte_is_found),
    };
    return cmocka_run_group_tests(tests, make_directory, remove_directory);
}
