/* Planning: counts in bounded memory, bounds from places, and the plan against the store that sharding then makes. */
#include "shard/plan.h"

#include "base/file.h"
#include "shard/census.h"
#include "store/store.h"

#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>
#include <xxhash.h>

#include <cmocka.h>

static char directory[] = "/tmp/windrow-plan-unit-XXXXXX";

static char *path_of(const char *name)
{
    char *path = windrow_path(directory, "%s", name);
    assert_non_null(path);
    return path;
}

static int directory_make(void **state)
{
    (void)state;
    return mkdtemp(directory) ? 0 : -1;
}

static int directory_drop(void **state)
{
    (void)state;
    return windrow_directory_remove(directory) == WINDROW_OK ? 0 : -1;
}

static uint64_t hash(uint64_t number)
{
    return XXH3_64bits(&number, sizeof number);
}

static uint64_t next_random(uint64_t *random)
{
    *random = *random * UINT64_C(6364136223846793005) + UINT64_C(1442695040888963407);
    return *random >> 20;
}

static void meet(struct windrow_sample *sample, uint64_t number, uint32_t place)
{
    struct windrow_sample_entry *entry = windrow_sample_meet(sample, hash(number), hash(number));
    if (entry)
        windrow_sample_mark(entry, WINDROW_SAMPLE_MET, place);
}

/* ---- Counting ---- */

static void counts_in_little_memory(void **state)
{
    (void)state;
    enum { THINGS = 300000, MOST = 8192 };
    struct windrow_sample forwards, backwards, even, odd;
    assert_int_equal(windrow_sample_create(&forwards, MOST), WINDROW_OK);
    assert_int_equal(windrow_sample_create(&backwards, MOST), WINDROW_OK);
    assert_int_equal(windrow_sample_create(&even, MOST), WINDROW_OK);
    assert_int_equal(windrow_sample_create(&odd, MOST), WINDROW_OK);
    for (uint64_t thing = 0; thing < THINGS; thing++) {
        meet(&forwards, thing, 1);
        meet(&backwards, THINGS - 1 - thing, 1);
        meet(&backwards, thing, 1); /* again: counts once */
        meet(thing % 2 ? &odd : &even, thing, 1);
    }
    double count = windrow_sample_count(&forwards, WINDROW_SAMPLE_MET);
    /* At least a half of the room is used: a standard error of 1/64 at most. */
    assert_true(fabs(count / THINGS - 1) < 4.0 / 64);
    assert_true(forwards.count > MOST / 3 && forwards.count <= MOST);
    /* Neither the order nor who met them matters. */
    assert_true(windrow_sample_count(&backwards, WINDROW_SAMPLE_MET) == count);
    windrow_sample_join(&even, &odd);
    assert_true(windrow_sample_count(&even, WINDROW_SAMPLE_MET) == count);
    assert_true(windrow_sample_count(&even, WINDROW_SAMPLE_LINKING) == 0);
    windrow_sample_free(&forwards);
    windrow_sample_free(&backwards);
    windrow_sample_free(&even);
    windrow_sample_free(&odd);
}

static void exact_when_all_fits(void **state)
{
    (void)state;
    struct windrow_sample sample;
    struct windrow_interval interval;
    assert_int_equal(windrow_sample_create(&sample, 1000), WINDROW_OK);
    for (uint64_t thing = 0; thing < 3000; thing++)
        meet(&sample, thing % 1000, 1);
    assert_int_equal(windrow_sample_estimate(&sample, WINDROW_SAMPLE_MET, 1, 1, &interval), WINDROW_OK);
    assert_true(interval.low == 1000 && interval.point == 1000 && interval.high == 1000);
    windrow_sample_free(&sample);
}

/* A dump of 2,000 places with 200 meetings each, of things whose frequencies have a heavy tail; of which a tenth of the places, then a
 * third, is read. The true number of things is known. */
static void bounds_hold_the_truth(void **state)
{
    (void)state;
    enum { PLACES = 2000, MEETINGS = 200 };
    int held = 0, near = 0, trials = 0;
    for (uint64_t seed = 1; seed <= 6; seed++)
        for (int every = 3; every <= 10; every += 7) {
            struct windrow_sample all, part;
            struct windrow_interval interval;
            uint64_t random = hash(seed);
            uint32_t place_count = 0;
            assert_int_equal(windrow_sample_create(&all, 1 << 19), WINDROW_OK);
            assert_int_equal(windrow_sample_create(&part, 1 << 19), WINDROW_OK);
            for (uint32_t place = 0; place < PLACES; place++) {
                bool read = hash(seed * 1000003 + place) % (uint64_t)every == 0;
                place_count += read;
                for (int meeting = 0; meeting < MEETINGS; meeting++) {
                    double u = (double)(next_random(&random) & 0xffffff) / 0x1p24;
                    uint64_t thing = (uint64_t)(3e5 * pow(u, 3));
                    meet(&all, thing, place + 1);
                    if (read)
                        meet(&part, thing, place_count);
                }
            }
            double truth = windrow_sample_count(&all, WINDROW_SAMPLE_MET);
            assert_int_equal(windrow_sample_estimate(&part, WINDROW_SAMPLE_MET, place_count, (double)place_count / PLACES, &interval), WINDROW_OK);
            trials++;
            held += interval.low <= truth && truth <= interval.high;
            near += fabs(interval.point / truth - 1) < 0.25;
            assert_true(interval.low <= interval.point && interval.point <= interval.high);
            windrow_sample_free(&all);
            windrow_sample_free(&part);
        }
    assert_int_equal(held, trials);
    assert_int_equal(near, trials);
}

/* What is met once in every place and nowhere twice grows with what is read; what is met everywhere does not. */
static void bounds_at_the_ends(void **state)
{
    (void)state;
    struct windrow_sample fresh, stale;
    struct windrow_interval interval;
    assert_int_equal(windrow_sample_create(&fresh, 1 << 14), WINDROW_OK);
    assert_int_equal(windrow_sample_create(&stale, 1 << 14), WINDROW_OK);
    for (uint32_t place = 1; place <= 100; place++)
        for (uint64_t thing = 0; thing < 50; thing++) {
            meet(&fresh, place * 50 + thing, place);
            meet(&stale, thing, place);
        }
    assert_int_equal(windrow_sample_estimate(&fresh, WINDROW_SAMPLE_MET, 100, 0.1, &interval), WINDROW_OK);
    assert_true(interval.low > 48000 && interval.high < 52000);
    assert_true(fabs(interval.point - 50000) < 1);
    assert_int_equal(windrow_sample_estimate(&stale, WINDROW_SAMPLE_MET, 100, 0.1, &interval), WINDROW_OK);
    assert_true(interval.low == 50 && interval.point == 50 && interval.high > 50 && interval.high < 100);
    windrow_sample_free(&fresh);
    windrow_sample_free(&stale);
}

/* ---- Reading in places ---- */

static void windows_take_whole_lines_once(void **state)
{
    (void)state;
    enum { LINES = 3000 };
    char *path = path_of("windows.tsv");
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    uint64_t random = 3;
    for (int line = 0; line < LINES; line++) {
        size_t length = line % 500 == 7 ? 400000 : next_random(&random) % 2000;
        fprintf(file, "http://a.example/%d\t", line);
        for (size_t at = 0; at < length; at++)
            fputc('a' + line % 26, file);
        if (line < LINES - 1)
            fputc('\n', file);
    }
    uint64_t bytes = (uint64_t)ftell(file);
    assert_int_equal(fclose(file), 0);
    bool met[LINES] = {false};
    int met_count = 0;
    const char *const dumps[] = {path};
    struct windrow_places *places;
    struct windrow_dump_chunk chunk = {0};
    /* All windows but a few: most lines, none twice, and each as long as it is. */
    assert_int_equal(windrow_places_open(dumps, 1, WINDROW_SHAPE_LISTS, false, bytes - 3 * WINDROW_PLACES_WINDOW_BYTES, &places), WINDROW_OK);
    assert_int_equal(windrow_places_basis(places), WINDROW_PLAN_PLACES);
    for (;;) {
        uint32_t place;
        struct windrow_dump_lines lines;
        struct windrow_dump_line line;
        struct windrow_dump_target target;
        assert_int_equal(windrow_places_read(places, &chunk, &place), WINDROW_OK);
        if (!chunk.bytes)
            break;
        windrow_dump_lines_begin(&lines, &chunk);
        while (windrow_dump_lines_next(&lines, &line)) {
            char source[64] = {0};
            assert_true(line.source_bytes > 17 && line.source_bytes < sizeof source);
            memcpy(source, line.source, line.source_bytes);
            int number = atoi(source + 17);
            assert_true(number >= 0 && number < LINES && !met[number]);
            met[number] = true;
            met_count++;
            if (number % 500 == 7) {
                assert_true(windrow_dump_line_target(&line, &target));
                assert_int_equal(target.bytes, 400000);
            }
        }
    }
    double share = windrow_places_share(places);
    assert_true(share > 0.8 && share < 1);
    assert_true(met_count > LINES * 3 / 4 && met_count < LINES);
    windrow_places_close(places);
    windrow_dump_chunk_free(&chunk);
    assert_int_equal(windrow_places_open(dumps, 1, WINDROW_SHAPE_LISTS, false, bytes, &places), WINDROW_OK);
    assert_int_equal(windrow_places_basis(places), WINDROW_PLAN_WHOLE);
    windrow_places_close(places);
    free(path);
}

/* ---- Disk ---- */

static void disk_from_counts(void **state)
{
    (void)state;
    struct windrow_plan_disk none = windrow_plan_disk(0, 0), some = windrow_plan_disk(1000000, 100000), more = windrow_plan_disk(2000000, 200000);
    assert_true(none.store_bytes > 0 && none.store_bytes < 1000000);
    assert_true(some.store_bytes < some.disk_bytes && some.scratch_bytes < some.disk_bytes);
    assert_true(llabs((long long)(more.store_bytes - some.store_bytes) - (long long)(some.store_bytes - none.store_bytes)) < 10);
    /* A billion links, 100 million pages: tens of gigabytes would be wrong by an order. */
    struct windrow_plan_disk billion = windrow_plan_disk(UINT64_C(1000000000), UINT64_C(100000000));
    assert_true(billion.store_bytes > UINT64_C(1) << 30 && billion.store_bytes < UINT64_C(5) << 30);
}

/* ---- The plan against the store ---- */

/* 160,000 lines on 400 hosts, with all that sharding drops: nofollow, self links, repeated links, other schemes, no URLs. */
static void write_crawl(const char *path)
{
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    uint64_t random = 11;
    for (int page = 0; page < 20000; page++) {
        char source[64];
        int host = page % 400;
        snprintf(source, sizeof source, "http://h%d.example/p/%d", host, page / 400);
        if (page % 37 == 0)
            fprintf(file, "%s\n", source);
        else
            for (int link = 0; link < 8; link++) {
                uint64_t kind = next_random(&random) % 40, far = next_random(&random) % 400;
                double u = (double)(next_random(&random) & 0xffff) / 0x1p16;
                fprintf(file, "%s\t", source);
                if (kind == 0)
                    fprintf(file, "%s", source);
                else if (kind == 1)
                    fprintf(file, "mailto:a@b.example");
                else if (kind == 2)
                    fprintf(file, "not a url");
                else if (kind < 30)
                    fprintf(file, "http://h%d.example/p/%d", host, (int)(200 * u * u));
                else
                    fprintf(file, "http%s://h%d.example/p/%d", kind == 39 ? "s" : "", (int)far, (int)(100 * u * u));
                fprintf(file, "%s\n", kind == 31 ? "\tnofollow" : "");
            }
    }
    assert_int_equal(fclose(file), 0);
}

static void expect_exactly(struct windrow_interval interval, uint64_t truth)
{
    assert_true(interval.low == (double)truth && interval.point == (double)truth && interval.high == (double)truth);
}

static void expect_within(struct windrow_interval interval, double truth)
{
    assert_true(interval.low <= truth && truth <= interval.high);
    assert_true(interval.low <= interval.point && interval.point <= interval.high);
}

static void plan_and_store(void **state)
{
    (void)state;
    char *dump = path_of("crawl.tsv"), *store = path_of("crawl"), *empty = path_of("empty");
    const char *const dumps[] = {dump};
    write_crawl(dump);
    assert_int_equal(windrow_directory_make(empty), WINDROW_OK);
    for (int keep = 0; keep < 2; keep++) {
        struct windrow_shard_options shard;
        struct windrow_standing standing;
        struct windrow_plan_options options;
        struct windrow_plan plan;
        windrow_shard_defaults(&shard);
        shard.out = store;
        shard.dumps = dumps;
        shard.dump_count = 1;
        shard.memory_bytes = UINT64_C(64) << 20;
        shard.threads = 2;
        shard.keep_nofollow = keep;
        assert_int_equal(windrow_shard(&shard, NULL), WINDROW_OK);
        assert_int_equal(windrow_standing_read(store, NULL, &standing), WINDROW_OK);

        windrow_plan_defaults(&options);
        options.dumps = dumps;
        options.dump_count = 1;
        options.memory_bytes = UINT64_C(64) << 20;
        options.threads = 2;
        options.keep_nofollow = keep;
        options.temporary = empty;
        options.full = true;
        assert_int_equal(windrow_plan(&options, &plan), WINDROW_OK);
        assert_int_equal(plan.basis, WINDROW_PLAN_WHOLE);
        expect_exactly(plan.pages, standing.pages);
        expect_exactly(plan.crawled_pages, standing.crawled_pages);
        expect_exactly(plan.core_pages, standing.core_pages);
        expect_exactly(plan.hosts, standing.hosts);
        /* Links in all are more than the memory for the sample holds. */
        expect_within(plan.links, (double)standing.links);
        assert_true(fabs(plan.links.point / (double)standing.links - 1) < 0.03);
        assert_true(fabs(plan.core_links.point / (double)standing.core_links - 1) < 0.03);
        double dangling = (double)standing.dangling_pages / (double)standing.pages;
        assert_true(fabs(plan.dangling_share.point - dangling) < 1e-9);
        assert_true(fabs(plan.frontier_share.point - 1 + (double)standing.crawled_pages / (double)standing.pages) < 1e-9);
        assert_true(fabs(plan.store_bytes.point / (double)standing.store_bytes - 1) < 0.25);
        assert_true(fabs(plan.link_bits.point / standing.link_bits - 1) < 0.02);
        assert_true(plan.variant_kinds.by_scheme > 0 && plan.variant_kinds.pages == plan.variant_kinds.by_scheme);

        /* A quarter of the dump: the truth lies between the bounds. */
        options.full = false;
        options.sample_bytes = UINT64_C(2) << 20;
        assert_int_equal(windrow_plan(&options, &plan), WINDROW_OK);
        assert_int_equal(plan.basis, WINDROW_PLAN_PLACES);
        assert_true(plan.share > 0.1 && plan.share < 0.5);
        expect_within(plan.pages, (double)standing.pages);
        expect_within(plan.crawled_pages, (double)standing.crawled_pages);
        expect_within(plan.core_pages, (double)standing.core_pages);
        expect_within(plan.hosts, (double)standing.hosts);
        expect_within(plan.links, (double)standing.links);
        expect_within(plan.core_links, (double)standing.core_links);
        expect_within(plan.store_bytes, (double)standing.store_bytes);
        expect_within(plan.link_bits, standing.link_bits);
        assert_true(plan.pages.high < 10 * plan.pages.low); /* bounds that say something */

        /* Memory decides whether the vectors fit, and nothing of a plan stays behind. */
        assert_true(plan.vectors_fit);
        assert_int_equal(rmdir(empty), 0);
        assert_int_equal(windrow_directory_make(empty), WINDROW_OK);
        assert_int_equal(windrow_directory_remove(store), WINDROW_OK);
    }
    free(dump);
    free(store);
    free(empty);
}

static void pipes_are_read_whole_or_not(void **state)
{
    (void)state;
    struct windrow_plan_options options;
    struct windrow_plan plan;
    const char *const dumps[] = {"/dev/null"};
    windrow_plan_defaults(&options);
    options.dumps = dumps;
    options.dump_count = 1;
    options.temporary = directory;
    assert_int_equal(windrow_plan(&options, &plan), WINDROW_USAGE);
    assert_non_null(strstr(windrow_message(), "--full"));
    options.full = true;
    assert_int_equal(windrow_plan(&options, &plan), WINDROW_OK);
    assert_true(plan.pages.point == 0 && plan.links.high == 0);
    options.memory_bytes = 1 << 20;
    assert_int_equal(windrow_plan(&options, &plan), WINDROW_USAGE);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(counts_in_little_memory), cmocka_unit_test(exact_when_all_fits), cmocka_unit_test(bounds_hold_the_truth),
        cmocka_unit_test(bounds_at_the_ends), cmocka_unit_test(windows_take_whole_lines_once), cmocka_unit_test(disk_from_counts),
        cmocka_unit_test(plan_and_store), cmocka_unit_test(pipes_are_read_whole_or_not),
    };
    return cmocka_run_group_tests(tests, directory_make, directory_drop);
}
