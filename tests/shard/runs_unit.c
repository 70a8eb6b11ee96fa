/* Key runs and link runs come back as they were written, from any frame on, and damaged ones are noticed. */
#include "shard/keyrun.h"
#include "shard/linkrun.h"

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

/* ---- Key runs ---- */

struct entry {
    uint8_t *key;
    size_t bytes;
    uint64_t degree;
    bool crawled;
};

static int entry_order(const void *a, const void *b)
{
    const struct entry *left = a, *right = b;
    return windrow_keyrun_compare(left->key, left->bytes, right->key, right->bytes);
}

/* Distinct ascending keys; every hundredth is as long as keys get. */
static struct entry *entries_make(struct dice *dice, size_t *count)
{
    size_t kept = 0;
    struct entry *entries = memory_array(*count, sizeof *entries);
    for (size_t index = 0; index < *count; index++) {
        size_t bytes = 1 + dice_below(dice, 60);
        if (dice_below(dice, 100) == 0)
            bytes = 65000 + dice_below(dice, 500);
        entries[index] = (struct entry){memory_array(bytes, 1), bytes, dice_below(dice, 3) ? dice_next(dice) % 5 : dice_next(dice) >> 1, dice_below(dice, 2)};
        for (size_t at = 0; at < bytes; at++)
            entries[index].key[at] = (uint8_t)(dice_below(dice, 4) ? 'a' : dice_below(dice, 256));
    }
    qsort(entries, *count, sizeof *entries, entry_order);
    for (size_t index = 0; index < *count; index++) {
        if (kept && entry_order(&entries[kept - 1], &entries[index]) == 0)
            free(entries[index].key);
        else
            entries[kept++] = entries[index];
    }
    *count = kept;
    return entries;
}

static void keyrun_write(const char *path, const struct entry *entries, size_t count)
{
    struct windrow_keyrun_writer run;
    assert_int_equal(windrow_keyrun_writer_open(&run, path), WINDROW_OK);
    for (size_t index = 0; index < count; index++) {
        size_t shared = index ? windrow_keyrun_shared(entries[index - 1].key, entries[index - 1].bytes, entries[index].key, entries[index].bytes, 0) : 0;
        assert_int_equal(windrow_keyrun_put(&run, entries[index].key, entries[index].bytes, shared, entries[index].degree, entries[index].crawled), WINDROW_OK);
    }
    assert_int_equal(windrow_keyrun_writer_finish(&run), WINDROW_OK);
}

static void expect_entry(const struct windrow_keyrun_reader *run, const struct entry *entries, size_t index)
{
    assert_false(run->ended);
    assert_int_equal(run->entry, index);
    assert_int_equal(run->key.bytes, entries[index].bytes);
    assert_memory_equal(run->key.data, entries[index].key, entries[index].bytes);
    assert_int_equal(run->degree, entries[index].degree);
    assert_int_equal(run->crawled, entries[index].crawled);
}

static void test_keyrun(void **state)
{
    (void)state;
    struct dice dice = {11};
    char *directory = scratch_make(), *path = scratch_path(directory, "run");
    for (size_t wanted = 0; wanted < 20000; wanted = wanted * 9 + 1) {
        size_t count = wanted;
        struct entry *entries = entries_make(&dice, &count);
        struct windrow_keyrun_reader run;
        struct windrow_keyrun_index index;
        keyrun_write(path, entries, count);
        assert_int_equal(windrow_keyrun_reader_open(&run, path), WINDROW_OK);
        for (size_t at = 0; at < count; at++) {
            assert_int_equal(windrow_keyrun_next(&run), WINDROW_OK);
            expect_entry(&run, entries, at);
            if (at)
                assert_int_equal(run.shared, windrow_keyrun_shared(entries[at - 1].key, entries[at - 1].bytes, entries[at].key, entries[at].bytes, 0));
        }
        assert_int_equal(windrow_keyrun_next(&run), WINDROW_OK);
        assert_true(run.ended);
        /* From every frame on. */
        assert_int_equal(windrow_keyrun_index_load(path, &index), WINDROW_OK);
        assert_true((count == 0) == (index.mark_count == 0));
        for (size_t mark = index.mark_count; mark-- > 0;) {
            size_t first = (size_t)index.marks[mark].first_entry;
            windrow_keyrun_seek(&run, &index.marks[mark]);
            assert_int_equal(windrow_keyrun_next(&run), WINDROW_OK);
            expect_entry(&run, entries, first);
            assert_int_equal(index.marks[mark].key_bytes, entries[first].bytes);
            assert_memory_equal(index.marks[mark].key, entries[first].key, entries[first].bytes);
        }
        windrow_keyrun_index_free(&index);
        windrow_keyrun_reader_close(&run);
        for (size_t at = 0; at < count; at++)
            free(entries[at].key);
        free(entries);
    }
    free(path);
    scratch_remove(directory);
}

static void test_shared(void **state)
{
    (void)state;
    struct dice dice = {12};
    for (int round = 0; round < 20000; round++) {
        uint8_t a[40], b[40];
        size_t a_bytes = dice_below(&dice, 40), b_bytes = dice_below(&dice, 40), expected = 0;
        for (size_t at = 0; at < 40; at++)
            a[at] = b[at] = (uint8_t)dice_next(&dice);
        if (dice_below(&dice, 2))
            b[dice_below(&dice, 40)] ^= (uint8_t)(1u << dice_below(&dice, 8));
        while (expected < a_bytes && expected < b_bytes && a[expected] == b[expected])
            expected++;
        size_t from = dice_below(&dice, (uint32_t)expected + 1);
        assert_int_equal(windrow_keyrun_shared(a, a_bytes, b, b_bytes, from), expected);
    }
}

/* ---- Link runs ---- */

struct list {
    uint64_t target;
    size_t count;
    uint64_t *sources;
};

static struct list *lists_make(struct dice *dice, size_t count, bool narrow)
{
    struct list *lists = memory_array(count + 1, sizeof *lists);
    uint64_t target = 0;
    for (size_t index = 0; index < count; index++) {
        target += index ? 1 + (dice_below(dice, 10) ? dice_below(dice, 4) : dice_next(dice) >> 30) : 0;
        size_t sources = 1 + dice_below(dice, dice_below(dice, 30) ? 20 : 3 * WINDROW_LINKRUN_SOURCES);
        lists[index] = (struct list){target, sources, memory_array(sources, sizeof(uint64_t))};
        uint64_t source = narrow ? dice_below(dice, 1000) : dice_next(dice) >> 10;
        for (size_t at = 0; at < sources; at++, source += 1 + (dice_below(dice, 4) ? 0 : dice_below(dice, 300)))
            lists[index].sources[at] = source;
    }
    return lists;
}

static void lists_free(struct list *lists, size_t count)
{
    for (size_t index = 0; index < count; index++)
        free(lists[index].sources);
    free(lists);
}

static void put_list(struct windrow_linkrun_writer *run, const struct list *list, bool narrow)
{
    if (narrow) {
        uint32_t *sources = memory_array(list->count, sizeof *sources);
        for (size_t at = 0; at < list->count; at++)
            sources[at] = (uint32_t)list->sources[at];
        assert_int_equal(windrow_linkrun_put_narrow(run, list->target, sources, list->count), WINDROW_OK);
        free(sources);
        return;
    }
    for (size_t at = 0; at < list->count; at += WINDROW_LINKRUN_SOURCES) {
        size_t part = list->count - at < WINDROW_LINKRUN_SOURCES ? list->count - at : WINDROW_LINKRUN_SOURCES;
        assert_int_equal(windrow_linkrun_put(run, list->target, list->sources + at, part, at + part < list->count), WINDROW_OK);
    }
}

static void expect_list(struct windrow_linkrun_reader *run, const struct list *list)
{
    size_t at = 0;
    do {
        assert_int_equal(windrow_linkrun_next(run), WINDROW_OK);
        assert_false(run->ended);
        assert_int_equal(run->target, list->target);
        assert_true(run->count >= 1 && at + run->count <= list->count);
        assert_memory_equal(run->sources, list->sources + at, run->count * sizeof *run->sources);
        at += run->count;
    } while (run->more);
    assert_int_equal(at, list->count);
}

static void test_linkrun(void **state)
{
    (void)state;
    struct dice dice = {13};
    char *directory = scratch_make(), *path = scratch_path(directory, "run");
    for (int round = 0; round < 8; round++) {
        bool narrow = round % 2;
        size_t count = dice_below(&dice, 2000), cut = dice_below(&dice, (uint32_t)count + 1);
        struct list *lists = lists_make(&dice, count, narrow);
        struct windrow_linkrun_writer writer;
        struct windrow_linkrun_reader reader;
        assert_int_equal(windrow_linkrun_writer_open(&writer, path), WINDROW_OK);
        for (size_t index = 0; index < cut; index++)
            put_list(&writer, &lists[index], narrow);
        assert_int_equal(windrow_linkrun_cut(&writer), WINDROW_OK);
        uint64_t border = windrow_frames_offset(&writer.frames);
        for (size_t index = cut; index < count; index++)
            put_list(&writer, &lists[index], narrow);
        assert_int_equal(windrow_linkrun_writer_finish(&writer), WINDROW_OK);
        assert_int_equal(windrow_linkrun_reader_open(&reader, path), WINDROW_OK);
        const uint64_t spans[3][2] = {{0, UINT64_MAX}, {border, UINT64_MAX}, {0, border}};
        for (int span = 0; span < 3; span++) {
            size_t first = spans[span][0] ? cut : 0, end = spans[span][1] == border ? cut : count;
            windrow_linkrun_seek(&reader, spans[span][0], spans[span][1]);
            for (size_t index = first; index < end; index++)
                expect_list(&reader, &lists[index]);
            assert_int_equal(windrow_linkrun_next(&reader), WINDROW_OK);
            assert_true(reader.ended);
        }
        windrow_linkrun_reader_close(&reader);
        lists_free(lists, count);
    }
    free(path);
    scratch_remove(directory);
}

/* ---- Damage ---- */

/* Reads the file to its end, or to the first failure; *sum stands for all that was read. */
static enum windrow_status read_links(const char *path, uint64_t *sum)
{
    struct windrow_linkrun_reader run;
    enum windrow_status status = windrow_linkrun_reader_open(&run, path);
    *sum = 0;
    while (!status && !(status = windrow_linkrun_next(&run)) && !run.ended) {
        *sum = *sum * 31 + run.target * 2 + run.more;
        for (size_t index = 0; index < run.count; index++)
            *sum = *sum * 31 + run.sources[index];
    }
    windrow_linkrun_reader_close(&run);
    return status;
}

static void test_damage(void **state)
{
    (void)state;
    struct dice dice = {14};
    char *directory = scratch_make(), *path = scratch_path(directory, "run");
    struct list *lists = lists_make(&dice, 60, true);
    struct windrow_linkrun_writer writer;
    uint64_t sum, all;
    assert_int_equal(windrow_linkrun_writer_open(&writer, path), WINDROW_OK);
    for (size_t index = 0; index < 60; index++)
        put_list(&writer, &lists[index], true);
    assert_int_equal(windrow_linkrun_writer_finish(&writer), WINDROW_OK);
    assert_int_equal(read_links(path, &all), WINDROW_OK);
    size_t bytes;
    char *good = scratch_read(path, &bytes);
    for (size_t at = 0; at < bytes; at += at < 40 ? 1 : 37) {
        scratch_damage(path, at);
        /* A bit that means nothing to zstd may be turned; then all is read as before. */
        enum windrow_status status = read_links(path, &sum);
        if (status != WINDROW_DAMAGED && (status || sum != all))
            fail_msg("byte %zu of %zu is damaged, and reading ends with %d", at, bytes, (int)status);
        scratch_write(path, good, bytes);
        scratch_cut(path, at);
        if (read_links(path, &sum) != WINDROW_DAMAGED)
            fail_msg("cut to %zu of %zu bytes, and nobody notices", at, bytes);
        scratch_write(path, good, bytes);
    }
    free(good);
    lists_free(lists, 60);
    /* Cut just between two frames, where what is left is good in itself. */
    uint64_t border = 0;
    lists = lists_make(&dice, 60, true);
    assert_int_equal(windrow_linkrun_writer_open(&writer, path), WINDROW_OK);
    for (size_t index = 0; index < 60; index++) {
        if (index == 30)
            assert_int_equal(windrow_linkrun_cut(&writer), WINDROW_OK);
        border = index == 30 ? windrow_frames_offset(&writer.frames) : border;
        put_list(&writer, &lists[index], true);
    }
    assert_int_equal(windrow_linkrun_writer_finish(&writer), WINDROW_OK);
    scratch_cut(path, (size_t)border);
    assert_int_equal(read_links(path, &sum), WINDROW_DAMAGED);
    lists_free(lists, 60);
    free(path);
    scratch_remove(directory);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_keyrun),
        cmocka_unit_test(test_shared),
        cmocka_unit_test(test_linkrun),
        cmocka_unit_test(test_damage),
    };
    return cmocka_run_group_tests_name("runs", tests, NULL, NULL);
}
