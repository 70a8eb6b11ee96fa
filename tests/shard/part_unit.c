/* The page merge against a plain union of sorted lists: pages, degrees, and each run's maps, however the key range is cut. */
#include "shard/part.h"

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

enum { KEYS = 400, RUNS_MOST = 19, KEY_BYTES = 24 };

struct page {
    uint8_t key[KEY_BYTES];
    size_t bytes;
    bool in_run[RUNS_MOST], crawled[RUNS_MOST];
    uint64_t degree[RUNS_MOST];
};

struct world {
    char *scratch;
    unsigned run_count;
    unsigned page_count;
    struct page pages[KEYS];
};

static int page_order(const void *a, const void *b)
{
    const struct page *left = a, *right = b;
    int order = memcmp(left->key, right->key, left->bytes < right->bytes ? left->bytes : right->bytes);
    return order ? order : (left->bytes > right->bytes) - (left->bytes < right->bytes);
}

/* Keys of few letters, so that many share long beginnings and some begin others; some are in all runs, some in one. */
static void world_make(struct dice *dice, struct world *world)
{
    world->scratch = scratch_make();
    world->run_count = 1 + dice_below(dice, RUNS_MOST);
    for (unsigned index = 0; index < KEYS; index++) {
        struct page *page = &world->pages[index];
        *page = (struct page){.bytes = 1 + dice_below(dice, KEY_BYTES)};
        for (size_t at = 0; at < page->bytes; at++)
            page->key[at] = (uint8_t)(dice_below(dice, 6) ? 'm' : dice_below(dice, 3) * 100);
    }
    qsort(world->pages, KEYS, sizeof *world->pages, page_order);
    world->page_count = 0;
    for (unsigned index = 0; index < KEYS; index++)
        if (!world->page_count || page_order(&world->pages[world->page_count - 1], &world->pages[index]))
            world->pages[world->page_count++] = world->pages[index];
    for (unsigned index = 0; index < world->page_count; index++) {
        struct page *page = &world->pages[index];
        unsigned share = dice_below(dice, 4), one = dice_below(dice, world->run_count);
        for (unsigned run = 0; run < world->run_count; run++) {
            page->in_run[run] = run == one || dice_below(dice, 4) < share;
            page->crawled[run] = dice_below(dice, 5) == 0;
            page->degree[run] = dice_below(dice, 4) ? 0 : dice_below(dice, 1000);
        }
    }
}

static char *run_path(const struct world *world, unsigned run)
{
    char name[32];
    sprintf(name, "batch-%06u.keys", run);
    return scratch_path(world->scratch, name);
}

static void write_runs(const struct world *world)
{
    for (unsigned run = 0; run < world->run_count; run++) {
        struct windrow_keyrun_writer writer;
        char *path = run_path(world, run);
        const struct page *before = NULL;
        assert_int_equal(windrow_keyrun_writer_open(&writer, path), WINDROW_OK);
        for (unsigned index = 0; index < world->page_count; index++) {
            const struct page *page = &world->pages[index];
            if (!page->in_run[run])
                continue;
            size_t shared = before ? windrow_keyrun_shared(before->key, before->bytes, page->key, page->bytes, 0) : 0;
            assert_int_equal(windrow_keyrun_put(&writer, page->key, page->bytes, shared, page->degree[run], page->crawled[run]), WINDROW_OK);
            before = page;
        }
        assert_int_equal(windrow_keyrun_writer_finish(&writer), WINDROW_OK);
        free(path);
    }
}

/* Cuts at random keys: of pages, in front of all, behind all, between two. */
static void plan_make(struct dice *dice, const struct world *world, struct windrow_part_plan *plan)
{
    unsigned cuts = dice_below(dice, 6);
    struct page keys[6];
    for (unsigned cut = 0; cut < cuts; cut++) {
        keys[cut] = world->pages[dice_below(dice, world->page_count)];
        if (dice_below(dice, 3) == 0 && keys[cut].bytes < KEY_BYTES)
            keys[cut].key[keys[cut].bytes++] = (uint8_t)dice_below(dice, 256);
        if (dice_below(dice, 6) == 0)
            keys[cut] = (struct page){.key = {255}, .bytes = 1};
    }
    qsort(keys, cuts, sizeof *keys, page_order);
    *plan = (struct windrow_part_plan){.part_count = 1, .key_at = memory_array(cuts + 2, sizeof(uint64_t))};
    for (unsigned cut = 0; cut < cuts; cut++) {
        if (cut && page_order(&keys[cut - 1], &keys[cut]) == 0)
            continue;
        assert_int_equal(windrow_buffer_append(&plan->keys, keys[cut].key, keys[cut].bytes), WINDROW_OK);
        plan->key_at[++plan->part_count] = plan->keys.bytes;
    }
}

static void check_parts(const struct world *world, uint64_t part_count, uint64_t *page_bases, uint64_t *core_bases)
{
    unsigned id = 0;
    uint64_t cores = 0;
    for (uint64_t part = 0; part < part_count; part++) {
        char name[32];
        sprintf(name, "part-%06llu", (unsigned long long)part);
        char *path = scratch_path(world->scratch, name);
        struct windrow_keyrun_reader reader;
        struct windrow_part_facts facts;
        page_bases[part] = id;
        core_bases[part] = cores;
        assert_int_equal(windrow_keyrun_reader_open(&reader, path), WINDROW_OK);
        while (!windrow_keyrun_next(&reader) && !reader.ended) {
            assert_true(id < world->page_count);
            const struct page *page = &world->pages[id++];
            uint64_t degree = 0;
            bool crawled = false;
            for (unsigned run = 0; run < world->run_count; run++) {
                degree += page->in_run[run] ? page->degree[run] : 0;
                crawled |= page->in_run[run] && page->crawled[run];
            }
            assert_int_equal(reader.key.bytes, page->bytes);
            assert_memory_equal(reader.key.data, page->key, page->bytes);
            assert_int_equal(reader.degree, degree);
            assert_int_equal(reader.crawled, crawled);
            cores += degree > 0;
        }
        assert_true(reader.ended);
        windrow_keyrun_reader_close(&reader);
        assert_int_equal(windrow_part_facts_load(world->scratch, part, &facts), WINDROW_OK);
        assert_int_equal(facts.pages, id - page_bases[part]);
        assert_int_equal(facts.core_pages, cores - core_bases[part]);
        free(path);
    }
    assert_int_equal(id, world->page_count);
}

static void check_maps(const struct world *world, uint64_t part_count, const uint64_t *page_bases, const uint64_t *core_bases)
{
    uint64_t *pages = memory_array(KEYS, sizeof *pages), *cores = memory_array(KEYS, sizeof *cores);
    for (unsigned run = 0; run < world->run_count; run++) {
        unsigned local = 0, count = 0;
        uint64_t core = 0;
        for (unsigned id = 0; id < world->page_count; id++)
            count += world->pages[id].in_run[run];
        assert_int_equal(windrow_part_map_load(world->scratch, part_count, page_bases, core_bases, run, count, pages, cores), WINDROW_OK);
        for (unsigned id = 0; id < world->page_count; id++) {
            uint64_t degree = 0;
            for (unsigned other = 0; other < world->run_count; other++)
                degree += world->pages[id].in_run[other] ? world->pages[id].degree[other] : 0;
            if (world->pages[id].in_run[run]) {
                assert_int_equal(pages[local], id);
                assert_true(cores[local] == (degree ? core : UINT64_MAX));
                local++;
            }
            core += degree > 0;
        }
        assert_int_equal(local, count);
        assert_int_equal(windrow_part_map_load(world->scratch, part_count, page_bases, core_bases, run, count + 1, pages, cores), WINDROW_DAMAGED);
    }
    free(pages);
    free(cores);
}

static void test_merge(void **state)
{
    (void)state;
    struct dice dice = {21};
    for (int round = 0; round < 30; round++) {
        struct world *world = memory_array(1, sizeof *world);
        struct windrow_part_plan plan;
        uint64_t page_bases[8], core_bases[8];
        world_make(&dice, world);
        write_runs(world);
        plan_make(&dice, world, &plan);
        for (uint64_t part = 0; part < plan.part_count; part++)
            assert_int_equal(windrow_part_merge(world->scratch, world->run_count, &plan, part), WINDROW_OK);
        check_parts(world, plan.part_count, page_bases, core_bases);
        check_maps(world, plan.part_count, page_bases, core_bases);
        windrow_part_plan_free(&plan);
        scratch_remove(world->scratch);
        free(world);
    }
}

/* The plan's keys ascend and come out the same each time. */
static void test_plan(void **state)
{
    (void)state;
    enum { PLANNED = 3 << 19 };
    char *scratch = scratch_make();
    for (unsigned run = 0; run < 2; run++) {
        char name[32];
        sprintf(name, "batch-%06u.keys", run);
        char *path = scratch_path(scratch, name);
        struct windrow_keyrun_writer writer;
        assert_int_equal(windrow_keyrun_writer_open(&writer, path), WINDROW_OK);
        for (uint32_t index = 0; index < PLANNED; index++) {
            uint32_t number = __builtin_bswap32(index * 2 + run), before = __builtin_bswap32(index * 2 + run - 2);
            size_t shared = index ? windrow_keyrun_shared((const uint8_t *)&before, 4, (const uint8_t *)&number, 4, 0) : 0;
            assert_int_equal(windrow_keyrun_put(&writer, (const uint8_t *)&number, 4, shared, 0, false), WINDROW_OK);
        }
        assert_int_equal(windrow_keyrun_writer_finish(&writer), WINDROW_OK);
        free(path);
    }
    struct windrow_part_plan plan, again;
    assert_int_equal(windrow_part_plan(scratch, 2, &plan), WINDROW_OK);
    assert_int_equal(windrow_part_plan(scratch, 2, &again), WINDROW_OK);
    assert_true(plan.part_count >= 2 && plan.part_count <= 4);
    assert_int_equal(plan.part_count, again.part_count);
    assert_int_equal(plan.keys.bytes, again.keys.bytes);
    assert_memory_equal(plan.keys.data, again.keys.data, plan.keys.bytes);
    assert_int_equal(plan.key_at[0], 0);
    assert_int_equal(plan.key_at[1], 0);
    for (uint64_t part = 2; part < plan.part_count; part++)
        assert_true(memcmp(plan.keys.data + plan.key_at[part - 1], plan.keys.data + plan.key_at[part], 4) < 0);
    uint64_t pages = 0;
    for (uint64_t part = 0; part < plan.part_count; part++) {
        struct windrow_part_facts facts;
        assert_int_equal(windrow_part_merge(scratch, 2, &plan, part), WINDROW_OK);
        assert_int_equal(windrow_part_facts_load(scratch, part, &facts), WINDROW_OK);
        assert_true(facts.pages > 0 && facts.pages < (5 << 18)); /* about WINDROW_PART_ENTRIES */
        pages += facts.pages;
    }
    assert_int_equal(pages, 2 * PLANNED);
    windrow_part_plan_free(&plan);
    windrow_part_plan_free(&again);
    scratch_remove(scratch);
}

static int no_sync(int descriptor)
{
    (void)descriptor;
    return 0;
}

int main(void)
{
    windrow_files.sync = windrow_files.sync_data = no_sync; /* nothing here loses power */
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_merge),
        cmocka_unit_test(test_plan),
    };
    return cmocka_run_group_tests_name("part", tests, NULL, NULL);
}
