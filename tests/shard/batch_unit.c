/* A batch's two runs against the pages and links that were put into it. */
#include "shard/batch.h"

#include "shard/keyrun.h"
#include "shard/linkrun.h"
#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

enum { PAGES = 300 };

struct model {
    bool present[PAGES], crawled[PAGES], linked[PAGES][PAGES];
    uint64_t links, duplicates, selfs;
};

struct room {
    char *directory, *keys, *links;
};

static void enter(struct room *room)
{
    room->directory = scratch_make();
    room->keys = scratch_path(room->directory, "keys");
    room->links = scratch_path(room->directory, "links");
}

static void leave(struct room *room)
{
    free(room->keys);
    free(room->links);
    scratch_remove(room->directory);
}

/* A key that sorts by its page's number, of a length that varies. */
static size_t key_write(unsigned page, char *key)
{
    int bytes = sprintf(key, "example\001h%03u", page);
    key[bytes++] = 0;
    key[bytes++] = 3;
    key[bytes++] = '/';
    for (unsigned more = page % 40; more; more--)
        key[bytes++] = 'x';
    return (size_t)bytes;
}

static void put_line(struct windrow_batch *batch, struct dice *dice, struct model *model, unsigned most)
{
    char key[100];
    unsigned source = dice_below(dice, dice_below(dice, 3) ? 10 : PAGES);
    size_t key_bytes = key_write(source, key);
    assert_int_equal(windrow_batch_source(batch, key, key_bytes), WINDROW_OK);
    model->present[source] = model->crawled[source] = true;
    for (unsigned left = dice_below(dice, most); left; left--) {
        unsigned target = dice_below(dice, dice_below(dice, 2) ? 20 : PAGES);
        bool self;
        key_bytes = key_write(target, key);
        assert_int_equal(windrow_batch_target(batch, key, key_bytes, &self), WINDROW_OK);
        assert_int_equal(self, source == target);
        model->selfs += self;
        if (self)
            continue;
        model->present[target] = true;
        if (model->linked[source][target])
            model->duplicates++;
        else
            model->links++;
        model->linked[source][target] = true;
    }
    assert_int_equal(windrow_batch_line_end(batch), WINDROW_OK);
}

static void check_runs(const struct room *room, const struct model *model)
{
    struct windrow_keyrun_reader keys;
    struct windrow_linkrun_reader links;
    unsigned locals[PAGES], count = 0;
    assert_int_equal(windrow_keyrun_reader_open(&keys, room->keys), WINDROW_OK);
    for (unsigned page = 0; page < PAGES; page++) {
        char key[100];
        size_t key_bytes = key_write(page, key);
        uint64_t degree = 0;
        if (!model->present[page])
            continue;
        for (unsigned target = 0; target < PAGES; target++)
            degree += model->linked[page][target];
        assert_int_equal(windrow_keyrun_next(&keys), WINDROW_OK);
        assert_false(keys.ended);
        assert_int_equal(keys.key.bytes, key_bytes);
        assert_memory_equal(keys.key.data, key, key_bytes);
        assert_int_equal(keys.degree, degree);
        assert_int_equal(keys.crawled, model->crawled[page]);
        locals[count++] = page;
    }
    assert_int_equal(windrow_keyrun_next(&keys), WINDROW_OK);
    assert_true(keys.ended);
    windrow_keyrun_reader_close(&keys);
    assert_int_equal(windrow_linkrun_reader_open(&links, room->links), WINDROW_OK);
    for (unsigned target = 0; target < count; target++) {
        bool begun = false;
        unsigned source = 0;
        for (;; source++) {
            while (source < count && !model->linked[locals[source]][locals[target]])
                source++;
            if (source == count)
                break;
            if (!begun)
                assert_int_equal(windrow_linkrun_next(&links), WINDROW_OK);
            begun = true;
            assert_int_equal(links.target, target);
            assert_true(links.used < links.count);
            assert_int_equal(links.sources[links.used++], source);
        }
        if (begun) {
            assert_int_equal(links.used, links.count);
            assert_false(links.more);
        }
    }
    assert_int_equal(windrow_linkrun_next(&links), WINDROW_OK);
    assert_true(links.ended);
    windrow_linkrun_reader_close(&links);
}

static void test_random_links(void **state)
{
    (void)state;
    struct dice dice = {41};
    struct windrow_batch *batch;
    struct windrow_batch_counts counts;
    struct room room;
    enter(&room);
    /* One batch, filled and emptied again and again: nothing of the round before may stay. */
    assert_int_equal(windrow_batch_create(1 << 20, NULL, &batch), WINDROW_OK);
    for (int round = 0; round < 20; round++) {
        struct model *model = memory_array(1, sizeof *model);
        assert_true(windrow_batch_empty(batch));
        for (unsigned lines = dice_below(&dice, 200); lines; lines--)
            put_line(batch, &dice, model, round % 2 ? 5 : 200); /* also more than are looked up together */
        assert_int_equal(windrow_batch_write(batch, room.keys, room.links, NULL, NULL, &counts), WINDROW_OK);
        assert_int_equal(counts.links, model->links);
        assert_int_equal(counts.duplicates, model->duplicates);
        check_runs(&room, model);
        free(model);
    }
    windrow_batch_destroy(batch);
    leave(&room);
}

/* A line may hold more pages than the batch was planned for: it is taken all the same, and then the batch is full. */
static void test_long_line(void **state)
{
    (void)state;
    enum { TARGETS = 60000 };
    struct windrow_batch *batch;
    struct windrow_batch_counts counts;
    struct room room;
    char key[40] = "example";
    enter(&room);
    assert_int_equal(windrow_batch_create(64 << 10, NULL, &batch), WINDROW_OK);
    assert_false(windrow_batch_full(batch));
    memcpy(key + 7, "\0\003/", 3);
    assert_int_equal(windrow_batch_source(batch, key, 10), WINDROW_OK);
    for (unsigned target = 0; target < TARGETS; target++) {
        bool self;
        int bytes = 10 + sprintf(key + 10, "%05u", target);
        assert_int_equal(windrow_batch_target(batch, key, (size_t)bytes, &self), WINDROW_OK);
        assert_false(self);
    }
    assert_int_equal(windrow_batch_line_end(batch), WINDROW_OK);
    assert_true(windrow_batch_full(batch));
    assert_int_equal(windrow_batch_write(batch, room.keys, room.links, NULL, NULL, &counts), WINDROW_OK);
    assert_int_equal(counts.pages, TARGETS + 1);
    assert_int_equal(counts.links, TARGETS);
    struct windrow_keyrun_reader keys;
    assert_int_equal(windrow_keyrun_reader_open(&keys, room.keys), WINDROW_OK);
    for (unsigned page = 0; page <= TARGETS; page++) {
        assert_int_equal(windrow_keyrun_next(&keys), WINDROW_OK);
        assert_int_equal(keys.key.bytes, page ? 15 : 10);
        assert_int_equal(keys.degree, page ? 0 : TARGETS);
        if (page) {
            sprintf(key, "%05u", page - 1);
            assert_memory_equal(keys.key.data + 10, key, 5);
        }
    }
    windrow_keyrun_reader_close(&keys);
    windrow_batch_destroy(batch);
    leave(&room);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_random_links),
        cmocka_unit_test(test_long_line),
    };
    return cmocka_run_group_tests_name("batch", tests, NULL, NULL);
}
