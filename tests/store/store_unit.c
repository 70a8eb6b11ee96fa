/* Pages, core numbers, rim numbers and hosts of a store, one by one, against plain counting: over many records of the core map, with
 * stretches of all kinds. */
#include "store/store.h"

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

enum { PAGES = 6000 };

struct world {
    unsigned host[PAGES];
    bool core[PAGES], crawled[PAGES];
};

/* Hosts of one page to hundreds; stretches of nothing but core pages, of none, and mixed ones. */
static void world_make(struct dice *dice, struct world *world)
{
    unsigned host = 0, host_left = 0, stretch_left = 0, share = 0;
    for (unsigned page = 0; page < PAGES; page++) {
        if (host_left-- == 0) {
            host++;
            host_left = dice_below(dice, dice_below(dice, 3) ? 5 : 700);
        }
        if (stretch_left-- == 0) {
            share = dice_below(dice, 5);
            stretch_left = dice_below(dice, 1500);
        }
        world->host[page] = host;
        world->core[page] = dice_below(dice, 4) < share;
        world->crawled[page] = world->core[page] || dice_below(dice, 3) == 0;
    }
}

static void put_url(FILE *file, const struct world *world, unsigned page)
{
    fprintf(file, "http://h%05u.example/%05u", world->host[page], page);
}

/* Every page is linked to, from core pages alone; the next page's line tells who was crawled. */
static void dump_write(const char *path, const struct world *world)
{
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    unsigned next = 0, last = PAGES;
    for (unsigned page = 0; page < PAGES; page++) {
        if (!world->crawled[page])
            continue;
        put_url(file, world, page);
        if (world->core[page]) {
            last = page;
            fputc('\t', file);
            put_url(file, world, page ? 0 : 1);
            for (; next < page; next++) { /* all pages since the core page before */
                fputc('\t', file);
                put_url(file, world, next);
            }
        }
        fputs("\n", file);
    }
    assert_true(last < PAGES);
    put_url(file, world, last);
    for (; next < PAGES; next++) {
        fputc('\t', file);
        put_url(file, world, next);
    }
    fputs("\n", file);
    fclose(file);
}

static void check_world(const struct windrow_store *store, const struct world *world)
{
    uint64_t cores = 0, hosts = 0, number;
    assert_int_equal(windrow_store_facts(store)->pages, PAGES);
    for (unsigned page = 0; page < PAGES; page++) {
        bool core = windrow_store_page_number(store, page, &number);
        assert_int_equal(core, world->core[page]);
        assert_int_equal(number, core ? cores : page - cores);
        assert_int_equal(windrow_store_page_crawled(store, page), world->crawled[page]);
        if (!page || world->host[page] != world->host[page - 1]) {
            struct windrow_host host = windrow_store_host(store, hosts);
            char name[32];
            sprintf(name, "h%05u.example", world->host[page]);
            assert_int_equal(host.first_page, page);
            assert_int_equal(host.first_core, cores);
            assert_int_equal(host.name_bytes, strlen(name));
            assert_memory_equal(host.name, name, host.name_bytes);
            hosts++;
        }
        assert_int_equal(windrow_store_host_of_page(store, page), hosts - 1);
        if (core)
            assert_int_equal(windrow_store_core_page(store, cores++), page);
    }
    assert_int_equal(windrow_store_facts(store)->core_pages, cores);
    assert_int_equal(windrow_store_facts(store)->hosts, hosts);
    assert_int_equal(windrow_store_host(store, hosts).first_page, PAGES);
    assert_int_equal(windrow_store_host(store, hosts).first_core, cores);
    assert_int_equal(windrow_store_core_page(store, cores), PAGES); /* there is none */
}

/* Pages are found in any order, and what is not there is not found. */
static void check_reader(const struct windrow_store *store, const struct world *world, struct dice *dice)
{
    struct windrow_page_reader *reader;
    assert_int_equal(windrow_page_reader_create(store, &reader), WINDROW_OK);
    for (int round = 0; round < 2000; round++) {
        unsigned page = dice_below(dice, PAGES);
        char expected[64];
        const char *url;
        size_t url_bytes;
        uint64_t found;
        bool folded;
        int bytes = sprintf(expected, "http://h%05u.example/%05u", world->host[page], page);
        assert_int_equal(windrow_page_reader_url(reader, page, &url, &url_bytes), WINDROW_OK);
        assert_int_equal(url_bytes, bytes);
        assert_string_equal(url, expected);
        assert_int_equal(windrow_page_reader_find(reader, expected, (size_t)bytes, &found, &folded), WINDROW_OK);
        assert_int_equal(found, page);
        assert_int_equal(windrow_page_reader_find(reader, expected, (size_t)bytes - 1, &found, &folded), WINDROW_NO);
        strcat(expected, "0");
        assert_int_equal(windrow_page_reader_find(reader, expected, (size_t)bytes + 1, &found, &folded), WINDROW_NO);
    }
    static const char *const odd[] = {"", "x", "ftp://h00001.example/", "http://a.example/", "http://zz.example/", "http:///"};
    for (size_t index = 0; index < sizeof odd / sizeof *odd; index++) {
        uint64_t found;
        bool folded;
        assert_int_equal(windrow_page_reader_find(reader, odd[index], strlen(odd[index]), &found, &folded), WINDROW_NO);
    }
    const char *url;
    size_t url_bytes;
    assert_int_equal(windrow_page_reader_url(reader, PAGES, &url, &url_bytes), WINDROW_BUG);
    windrow_page_reader_destroy(reader);
}

static void test_numbers(void **state)
{
    (void)state;
    struct dice dice = {111};
    for (int round = 0; round < 4; round++) {
        struct world *world = memory_array(1, sizeof *world);
        char *directory = scratch_make(), *dump = scratch_path(directory, "dump"), *path = scratch_path(directory, "store");
        const char *const dumps[] = {dump};
        struct windrow_shard_options options;
        struct windrow_store *store = NULL;
        world_make(&dice, world);
        dump_write(dump, world);
        windrow_shard_defaults(&options);
        options.out = path;
        options.dumps = dumps;
        options.dump_count = 1;
        options.shape = WINDROW_SHAPE_LISTS;
        options.memory_bytes = UINT64_C(64) << 20;
        if (windrow_shard(&options, NULL) || windrow_store_open(path, &store))
            fail_msg("%s", windrow_message());
        check_world(store, world);
        check_reader(store, world, &dice);
        windrow_store_close(store);
        free(dump);
        free(path);
        free(world);
        scratch_remove(directory);
    }
}

static void test_not_there(void **state)
{
    (void)state;
    char *directory = scratch_make(), *path = scratch_path(directory, "no store");
    struct windrow_store *store;
    assert_int_equal(windrow_store_open(path, &store), WINDROW_USAGE);
    assert_null(store);
    assert_int_equal(windrow_store_open(directory, &store), WINDROW_NO); /* not finished */
    assert_null(store);
    windrow_store_close(NULL);
    free(path);
    scratch_remove(directory);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_numbers),
        cmocka_unit_test(test_not_there),
    };
    return cmocka_run_group_tests_name("store", tests, NULL, NULL);
}
