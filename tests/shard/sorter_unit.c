/* Sorting more records than memory holds, and the files that they lie in. */
#include "shard/sorter.h"

#include "../common/graph.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

struct text {
    uint8_t key[24], value[24];
    size_t key_bytes, value_bytes;
};

static struct windrow_record record_of(const struct text *text)
{
    return (struct windrow_record){text->key, text->key_bytes, text->value, text->value_bytes};
}

static int text_order(const void *a, const void *b)
{
    const struct windrow_record left = record_of(a), right = record_of(b);
    return windrow_record_compare(&left, &right);
}

/* Few different bytes and lengths, so that keys are equal or begin one another, zero bytes included. */
static void text_make(struct dice *dice, struct text *text)
{
    text->key_bytes = dice_below(dice, 12);
    text->value_bytes = dice_below(dice, 12);
    for (size_t i = 0; i < sizeof text->key; i++) {
        text->key[i] = (uint8_t)(dice_below(dice, 3) * 127);
        text->value[i] = (uint8_t)(dice_below(dice, 3) * 127);
    }
}

static void check_sorted(struct dice *dice, size_t count, uint64_t memory_bytes)
{
    char *scratch = scratch_make();
    struct text *texts = calloc(count + 1, sizeof *texts);
    struct windrow_sorter *sorter;
    struct windrow_record record;
    bool ended;
    assert_int_equal(windrow_sorter_create(scratch, "t", memory_bytes, &sorter), WINDROW_OK);
    for (size_t i = 0; i < count; i++) {
        text_make(dice, &texts[i]);
        record = record_of(&texts[i]);
        assert_int_equal(windrow_sorter_put(sorter, &record), WINDROW_OK);
    }
    qsort(texts, count, sizeof *texts, text_order);
    for (size_t i = 0; i < count; i++) {
        struct windrow_record expected = record_of(&texts[i]);
        assert_int_equal(windrow_sorter_next(sorter, &record, &ended), WINDROW_OK);
        assert_false(ended);
        if (windrow_record_compare(&record, &expected) != 0)
            fail_msg("record %zu of %zu, memory %d", i, count, (int)memory_bytes);
    }
    for (int again = 0; again < 2; again++) {
        assert_int_equal(windrow_sorter_next(sorter, &record, &ended), WINDROW_OK);
        assert_true(ended);
    }
    windrow_sorter_destroy(sorter);
    struct scratch_listing left = scratch_list(scratch);
    assert_int_equal(left.count, 0);
    scratch_listing_free(&left);
    free(texts);
    scratch_remove(scratch);
}

static void any_memory_gives_the_same_order(void **state)
{
    (void)state;
    struct dice dice = {1};
    check_sorted(&dice, 0, 0);
    check_sorted(&dice, 0, 1 << 20);
    check_sorted(&dice, 1, 0);
    check_sorted(&dice, 3000, 1 << 20);
    /* So small that every record is a run, and two runs at a time are merged, level upon level. */
    check_sorted(&dice, 300, 0);
    for (int round = 0; round < 30; round++)
        check_sorted(&dice, dice_below(&dice, 3000), 500 + dice_below(&dice, 20000));
    /* Room for three readers and more than three runs. */
    check_sorted(&dice, 200000, 1600 << 10);
}

static void long_records_fit(void **state)
{
    (void)state;
    char *scratch = scratch_make();
    struct windrow_sorter *sorter;
    struct windrow_record record;
    bool ended;
    uint8_t *text = calloc(2, WINDROW_RECORD_BYTES_MAX);
    assert_int_equal(windrow_sorter_create(scratch, "t", 1000, &sorter), WINDROW_OK);
    for (int i = 9; i >= 0; i--) {
        text[WINDROW_RECORD_BYTES_MAX - 1] = (uint8_t)i;
        record = (struct windrow_record){text, WINDROW_RECORD_BYTES_MAX, text + WINDROW_RECORD_BYTES_MAX, WINDROW_RECORD_BYTES_MAX};
        assert_int_equal(windrow_sorter_put(sorter, &record), WINDROW_OK);
    }
    for (int i = 0; i < 10; i++) {
        assert_int_equal(windrow_sorter_next(sorter, &record, &ended), WINDROW_OK);
        assert_int_equal(record.key_bytes, WINDROW_RECORD_BYTES_MAX);
        assert_int_equal(record.key[WINDROW_RECORD_BYTES_MAX - 1], i);
        assert_int_equal(record.value_bytes, WINDROW_RECORD_BYTES_MAX);
    }
    windrow_sorter_destroy(sorter);
    free(text);
    scratch_remove(scratch);
}

static void damaged_files_are_noticed(void **state)
{
    (void)state;
    char *scratch = scratch_make(), *path = scratch_path(scratch, "records");
    struct windrow_records_writer out;
    struct windrow_records_reader in;
    struct dice dice = {2};
    struct text text;
    assert_int_equal(windrow_records_writer_open(&out, path), WINDROW_OK);
    for (int i = 0; i < 20000; i++) {
        text_make(&dice, &text);
        struct windrow_record record = record_of(&text);
        assert_int_equal(windrow_records_put(&out, &record), WINDROW_OK);
    }
    assert_int_equal(windrow_records_writer_finish(&out, true), WINDROW_OK);
    size_t bytes;
    char *whole = scratch_read(path, &bytes);
    for (int round = 0; round < 60; round++) {
        scratch_write(path, whole, bytes);
        if (round % 2)
            scratch_damage(path, dice_below(&dice, (uint32_t)bytes));
        else
            scratch_cut(path, 1 + dice_below(&dice, (uint32_t)bytes - 1));
        assert_int_equal(windrow_records_reader_open(&in, path), WINDROW_OK);
        enum windrow_status status;
        uint64_t count = 0;
        while (!(status = windrow_records_next(&in)) && !in.ended)
            count++;
        /* A file cut between two frames is shorter, nothing else. */
        if (status != WINDROW_DAMAGED && (round % 2 || count >= 20000))
            fail_msg("round %d: status %d after %d records", round, (int)status, (int)count);
        windrow_records_reader_close(&in);
    }
    free(whole);
    free(path);
    scratch_remove(scratch);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(any_memory_gives_the_same_order),
        cmocka_unit_test(long_records_fit),
        cmocka_unit_test(damaged_files_are_noticed),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
