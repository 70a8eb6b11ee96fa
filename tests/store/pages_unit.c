/* The page table's frames: keys come back by number and by key, and damaged frames are noticed or do no harm. */
#include "store/pages.h"

#include "url/key.h"
#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <fcntl.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <unistd.h>

#include <cmocka.h>

struct key {
    uint8_t *data;
    size_t bytes;
    uint64_t number;
};

struct table {
    char *directory, *path;
    bool with_numbers;
    struct key *keys;
    size_t key_count;
    struct windrow_pages_writer writer; /* kept for its marks */
    struct windrow_pages_index index;
    int descriptor;
};

static int key_order(const void *a, const void *b)
{
    const struct key *left = a, *right = b;
    return windrow_key_compare((const char *)left->data, left->bytes, (const char *)right->data, right->bytes);
}

static size_t common(const struct key *a, const struct key *b)
{
    size_t shared = 0;
    while (shared < a->bytes && shared < b->bytes && a->data[shared] == b->data[shared])
        shared++;
    return shared;
}

/* Writes the keys, which are the table's from now on, as one file whose first entry is `first_entry`. */
static void table_write(struct table *table, struct key *keys, size_t count, bool with_numbers)
{
    uint64_t bytes, checksum;
    *table = (struct table){.directory = scratch_make(), .with_numbers = with_numbers, .keys = keys, .key_count = count};
    table->path = scratch_path(table->directory, "frames");
    assert_int_equal(windrow_pages_writer_open(&table->writer, table->path, 0, with_numbers), WINDROW_OK);
    for (size_t index = 0; index < count; index++)
        assert_int_equal(windrow_pages_put(&table->writer, keys[index].data, keys[index].bytes, index ? common(&keys[index - 1], &keys[index]) : 0,
                                           keys[index].number), WINDROW_OK);
    assert_int_equal(windrow_pages_writer_finish(&table->writer, &bytes, &checksum), WINDROW_OK);
    struct windrow_pages_mark last = {count, bytes, table->writer.first_keys.bytes};
    assert_int_equal(windrow_buffer_append(&table->writer.marks, &last, sizeof last), WINDROW_OK);
    struct windrow_map marks = {.data = table->writer.marks.data, .bytes = table->writer.marks.bytes};
    struct windrow_map first_keys = {.data = table->writer.first_keys.data, .bytes = table->writer.first_keys.bytes};
    assert_int_equal(windrow_pages_index_open(&marks, &first_keys, count, &table->index), WINDROW_OK);
    assert_int_equal(windrow_pages_index_open(&marks, &first_keys, count + 1, &table->index), WINDROW_DAMAGED);
    assert_int_equal(windrow_pages_index_open(&marks, &first_keys, count, &table->index), WINDROW_OK);
    table->descriptor = open(table->path, O_RDONLY);
    assert_true(table->descriptor >= 0);
    uint64_t found_bytes, found_checksum;
    assert_int_equal(windrow_file_checksum(table->path, &found_bytes, &found_checksum), WINDROW_OK);
    assert_int_equal(found_bytes, bytes);
    assert_true(found_checksum == checksum);
}

static void table_free(struct table *table)
{
    close(table->descriptor);
    windrow_pages_writer_free(&table->writer);
    for (size_t index = 0; index < table->key_count; index++)
        free(table->keys[index].data);
    free(table->keys);
    free(table->path);
    scratch_remove(table->directory);
}

/* Distinct ascending keys; `longest` bytes at most. */
static struct key *keys_make(struct dice *dice, size_t *count, size_t longest)
{
    struct key *keys = memory_array(*count + 1, sizeof *keys);
    size_t kept = 0;
    for (size_t index = 0; index < *count; index++) {
        keys[index] = (struct key){.bytes = 1 + dice_below(dice, (uint32_t)longest), .number = dice_next(dice) >> dice_below(dice, 64)};
        keys[index].data = memory_array(keys[index].bytes, 1);
        for (size_t at = 0; at < keys[index].bytes; at++)
            keys[index].data[at] = (uint8_t)(dice_below(dice, 8) ? 'k' : dice_next(dice));
    }
    qsort(keys, *count, sizeof *keys, key_order);
    for (size_t index = 0; index < *count; index++) {
        if (kept && key_order(&keys[kept - 1], &keys[index]) == 0)
            free(keys[index].data);
        else
            keys[kept++] = keys[index];
    }
    *count = kept;
    return keys;
}

static void check_table(const struct table *table)
{
    struct windrow_pages_frame frame = {0};
    uint32_t position;
    size_t next = 0;
    for (uint64_t number = 0; number < table->index.frame_count; number++) {
        size_t bytes = 0;
        assert_int_equal(windrow_pages_frame_read(&table->index, number, table->descriptor, table->path, table->with_numbers, &frame), WINDROW_OK);
        assert_int_equal(frame.first_entry, next);
        assert_true(frame.key_count >= 1 && frame.key_count <= WINDROW_PAGES_FRAME_KEYS);
        for (uint32_t index = 0; index < frame.key_count; index++, next++) {
            const struct key *key = &table->keys[next];
            assert_int_equal(frame.key_at[index + 1] - frame.key_at[index], key->bytes);
            assert_memory_equal(frame.keys.data + frame.key_at[index], key->data, key->bytes);
            if (table->with_numbers)
                assert_true(frame.numbers[index] == key->number);
            assert_int_equal(windrow_pages_frame_of_entry(&table->index, next), number);
            assert_int_equal(windrow_pages_frame_of_key(&table->index, key->data, key->bytes), number);
            assert_true(windrow_pages_frame_find(&frame, key->data, key->bytes, &position));
            assert_int_equal(position, index);
            bytes += key->bytes;
            /* One byte less, or one more, is another key. */
            uint8_t longer[65536 + 1];
            memcpy(longer, key->data, key->bytes);
            longer[key->bytes] = 0;
            if (next + 1 == table->key_count || common(&table->keys[next + 1], &(struct key){longer, key->bytes + 1, 0}) <= key->bytes)
                assert_false(windrow_pages_frame_find(&frame, longer, key->bytes + 1, &position));
        }
        assert_true(bytes <= WINDROW_PAGES_FRAME_BYTES);
    }
    assert_int_equal(next, table->key_count);
    windrow_pages_frame_free(&frame);
}

static void test_round_trip(void **state)
{
    (void)state;
    struct dice dice = {51};
    static const size_t counts[] = {0, 1, 2, 700, 1000, WINDROW_PAGES_FRAME_KEYS, 60000}, longest[] = {10, 65000, 3, 65000, 20, 40, 40};
    for (size_t round = 0; round < sizeof counts / sizeof *counts; round++) {
        size_t count = counts[round];
        struct key *keys = keys_make(&dice, &count, longest[round]);
        struct table table;
        table_write(&table, keys, count, round % 2);
        check_table(&table);
        /* Frames hold as many keys, or bytes, as they may. */
        if (longest[round] < 100)
            assert_int_equal(table.index.frame_count, (count + WINDROW_PAGES_FRAME_KEYS - 1) / WINDROW_PAGES_FRAME_KEYS);
        else
            assert_true(count < 2 || table.index.frame_count > 1);
        table_free(&table);
    }
}

/* Puts other bytes in the place of the table's file: in memory, since rewriting a file thousands of times is slow. */
static void table_replace(struct table *table, const void *bytes, size_t count)
{
    close(table->descriptor);
    table->descriptor = memfd_create("frames", 0);
    assert_int_equal(pwrite(table->descriptor, bytes, count, 0), count);
}

/* Reads all frames; WINDROW_DAMAGED when one is, else checks that everything is as it was. */
static enum windrow_status read_damaged(struct table *table)
{
    struct windrow_pages_frame frame = {0};
    enum windrow_status status = WINDROW_OK;
    for (uint64_t number = 0; !status && number < table->index.frame_count; number++)
        status = windrow_pages_frame_read(&table->index, number, table->descriptor, table->path, table->with_numbers, &frame);
    windrow_pages_frame_free(&frame);
    if (!status)
        check_table(table);
    return status;
}

static void test_damaged_frames(void **state)
{
    (void)state;
    struct dice dice = {52};
    size_t count = 150, bytes;
    struct key *keys = keys_make(&dice, &count, 12);
    struct table table;
    table_write(&table, keys, count, true);
    char *good = scratch_read(table.path, &bytes);
    for (size_t at = 0; at < bytes; at++) {
        for (unsigned bit = 0; bit < 8; bit += 3) {
            char *bad = memory_array(bytes, 1);
            memcpy(bad, good, bytes);
            bad[at] = (char)(bad[at] ^ (1 << bit));
            table_replace(&table, bad, bytes);
            free(bad);
            enum windrow_status status = read_damaged(&table);
            assert_true(status == WINDROW_OK || status == WINDROW_DAMAGED);
        }
        table_replace(&table, good, at);
        assert_int_equal(read_damaged(&table), WINDROW_DAMAGED);
    }
    free(good);
    table_free(&table);
}

/* Frames that zstd takes for good and that lie: every byte of the contents is changed, and every end cut off. */
static void test_lying_frames(void **state)
{
    (void)state;
    struct dice dice = {53};
    size_t count = 40, bytes;
    struct key *keys = keys_make(&dice, &count, 10);
    struct table table;
    uint8_t good[4096], bad[4096], packed[8192];
    table_write(&table, keys, count, true);
    char *file = scratch_read(table.path, &bytes);
    size_t raw = ZSTD_decompress(good, sizeof good, file, bytes);
    assert_false(ZSTD_isError(raw));
    size_t noticed = 0, changed = 0;
    for (size_t at = 0; at < raw; at++)
        for (unsigned value = 0; value < 256; value += value < 8 || value >= 248 ? 1 : 16) {
            if ((uint8_t)value == good[at])
                continue;
            memcpy(bad, good, raw);
            bad[at] = (uint8_t)value;
            table_replace(&table, packed, ZSTD_compress(packed, sizeof packed, bad, raw, 1));
            struct windrow_pages_frame frame = {0};
            enum windrow_status status = windrow_pages_frame_read(&table.index, 0, table.descriptor, table.path, true, &frame);
            assert_true(status == WINDROW_OK || status == WINDROW_DAMAGED);
            noticed += status != WINDROW_OK;
            changed++;
            /* What passes is well formed at least: ascending keys. */
            for (uint32_t index = 1; !status && index < frame.key_count; index++)
                assert_true(windrow_key_compare((char *)frame.keys.data + frame.key_at[index - 1], frame.key_at[index] - frame.key_at[index - 1],
                                                (char *)frame.keys.data + frame.key_at[index], frame.key_at[index + 1] - frame.key_at[index]) < 0);
            windrow_pages_frame_free(&frame);
        }
    assert_true(noticed > changed / 4);
    for (size_t end = 0; end < raw; end++) {
        table_replace(&table, packed, ZSTD_compress(packed, sizeof packed, good, end, 1));
        assert_int_equal(read_damaged(&table), WINDROW_DAMAGED);
    }
    free(file);
    table_free(&table);
}

/* A small frame that would unfold into a gigabyte of keys is refused before it does. */
static void test_bomb(void **state)
{
    (void)state;
    enum { KEYS = WINDROW_PAGES_FRAME_KEYS, BYTES = 60000 };
    struct windrow_buffer raw = {0};
    uint8_t rest[BYTES];
    struct windrow_pages_mark marks[2] = {{0, 0, 0}, {KEYS, 0, BYTES}};
    struct windrow_map mark_map = {.data = (const uint8_t *)marks, .bytes = sizeof marks}, key_map = {.data = rest, .bytes = BYTES};
    struct windrow_pages_index index;
    struct windrow_pages_frame frame = {0};
    memset(rest, 'b', sizeof rest);
    /* Each key is all of the one before but its last two bytes, and a number. */
    uint32_t head[4] = {KEYS, 1 + 3 * (KEYS - 1), 3 + (KEYS - 1), BYTES + 2 * (KEYS - 1)};
    windrow_buffer_append(&raw, head, sizeof head);
    windrow_buffer_append(&raw, "", 1);
    uint32_t shared = BYTES - 2;
    for (unsigned key = 1; key < KEYS; key++)
        windrow_buffer_append(&raw, (uint8_t[]){(uint8_t)(shared | 128), (uint8_t)(shared >> 7 | 128), (uint8_t)(shared >> 14)}, 3);
    windrow_buffer_append(&raw, (uint8_t[]){(uint8_t)(BYTES | 128), (uint8_t)(BYTES >> 7 | 128), BYTES >> 14}, 3);
    for (unsigned key = 1; key < KEYS; key++)
        windrow_buffer_append(&raw, "\2", 1);
    windrow_buffer_append(&raw, rest, BYTES);
    for (unsigned key = 1; key < KEYS; key++)
        windrow_buffer_append(&raw, (uint8_t[]){(uint8_t)(128 + (key >> 8)), (uint8_t)key}, 2);
    size_t bound = ZSTD_compressBound(raw.bytes);
    char *packed = memory_array(bound, 1), *directory = scratch_make(), *path = scratch_path(directory, "bomb");
    size_t bytes = ZSTD_compress(packed, bound, raw.data, raw.bytes, 1);
    assert_false(ZSTD_isError(bytes));
    scratch_write(path, packed, bytes);
    assert_int_equal(windrow_pages_index_open(&mark_map, &key_map, KEYS, &index), WINDROW_OK);
    int descriptor = open(path, O_RDONLY);
    assert_int_equal(windrow_pages_frame_read(&index, 0, descriptor, path, false, &frame), WINDROW_DAMAGED);
    assert_true(frame.keys.capacity_bytes < 4 * WINDROW_PAGES_FRAME_BYTES);
    close(descriptor);
    windrow_pages_frame_free(&frame);
    windrow_buffer_free(&raw);
    free(packed);
    free(path);
    scratch_remove(directory);
}

static void test_lying_index(void **state)
{
    (void)state;
    static const struct {
        struct windrow_pages_mark marks[3];
        size_t bytes;
        bool good;
    } cases[] = {
        {{{0, 0, 0}, {5, 9, 2}, {9, 0, 4}}, 72, true},
        {{{0, 0, 0}, {5, 9, 2}, {9, 0, 4}}, 71, false},                                       /* half a mark */
        {{{0, 0, 0}, {5, 9, 2}, {9, 0, 4}}, 0, false},                                        /* none */
        {{{1, 0, 0}, {5, 9, 2}, {9, 0, 4}}, 72, false},                                       /* begins behind the first */
        {{{0, 0, 1}, {5, 9, 2}, {9, 0, 4}}, 72, false},                                       /* a first key begins late */
        {{{0, 0, 0}, {0, 9, 2}, {9, 0, 4}}, 72, false},                                       /* an empty frame */
        {{{0, 0, 0}, {5, 9, 0}, {9, 0, 4}}, 72, false},                                       /* an empty first key */
        {{{0, 0, 0}, {5, 9, 2}, {9, 0, 5}}, 72, false},                                       /* more first keys than there are */
        {{{0, 0, 0}, {10, 9, 2}, {9, 0, 4}}, 72, false},                                      /* descending entries */
        {{{0, 0, 0}, {5, 9, 9}, {9, 0, 4}}, 72, false},                                       /* descending keys */
        {{{0, 0, 0}, {WINDROW_PAGES_FRAME_KEYS + 1, 9, 2}, {WINDROW_PAGES_FRAME_KEYS + 2, 0, 4}}, 72, false}, /* too many keys */
    };
    for (size_t index = 0; index < sizeof cases / sizeof *cases; index++) {
        struct windrow_map marks = {.data = (const uint8_t *)cases[index].marks, .bytes = cases[index].bytes};
        struct windrow_map keys = {.data = (const uint8_t *)"abcd", .bytes = 4};
        struct windrow_pages_index opened;
        uint64_t entries = index + 1 == sizeof cases / sizeof *cases ? WINDROW_PAGES_FRAME_KEYS + 2 : 9;
        enum windrow_status status = windrow_pages_index_open(&marks, &keys, entries, &opened);
        if (status != (cases[index].good ? WINDROW_OK : WINDROW_DAMAGED))
            fail_msg("index %zu: %d", index, (int)status);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_round_trip),
        cmocka_unit_test(test_damaged_frames),
        cmocka_unit_test(test_lying_frames),
        cmocka_unit_test(test_bomb),
        cmocka_unit_test(test_lying_index),
    };
    return cmocka_run_group_tests_name("pages", tests, NULL, NULL);
}
