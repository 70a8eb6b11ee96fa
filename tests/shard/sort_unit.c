/* Sorting keys by eight bytes at a time against qsort with memcmp, on keys that are hard for it. */
#include "shard/sort.h"

#include "../common/graph.h"
#include "../common/memory.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

struct keys {
    size_t count, capacity_bytes;
    uint8_t *bytes;
    size_t *at;         /* count + 1 */
};

static const uint8_t *key_of(const void *context, uint32_t reference)
{
    const struct keys *keys = context;
    return keys->bytes + keys->at[reference];
}

static const struct keys *compared;

static int plain_order(const void *a, const void *b)
{
    size_t left = *(const uint32_t *)a, right = *(const uint32_t *)b;
    size_t left_bytes = compared->at[left + 1] - compared->at[left], right_bytes = compared->at[right + 1] - compared->at[right];
    int order = memcmp(compared->bytes + compared->at[left], compared->bytes + compared->at[right], left_bytes < right_bytes ? left_bytes : right_bytes);
    return order ? order : (left_bytes > right_bytes) - (left_bytes < right_bytes);
}

static void check_sorts(const struct keys *keys)
{
    struct windrow_sort_item *items = memory_array(keys->count + 1, sizeof *items);
    uint32_t *expected = memory_array(keys->count + 1, sizeof *expected);
    bool *seen = memory_array(keys->count + 1, sizeof *seen);
    for (uint32_t index = 0; index < keys->count; index++) {
        items[index] = (struct windrow_sort_item){0, index, (uint32_t)(keys->at[index + 1] - keys->at[index])};
        expected[index] = index;
    }
    windrow_sort_keys(items, keys->count, key_of, keys);
    compared = keys;
    qsort(expected, keys->count, sizeof *expected, plain_order);
    for (size_t index = 0; index < keys->count; index++) {
        assert_true(items[index].reference < keys->count && !seen[items[index].reference]);
        seen[items[index].reference] = true;
        if (plain_order(&items[index].reference, &expected[index]) != 0)
            fail_msg("key %zu of %zu is not in its place", index, keys->count);
        assert_int_equal(items[index].key_bytes, keys->at[items[index].reference + 1] - keys->at[items[index].reference]);
    }
    free(items);
    free(expected);
    free(seen);
}

static void keys_begin(struct keys *keys, size_t count, size_t capacity_bytes)
{
    *keys = (struct keys){.capacity_bytes = capacity_bytes, .bytes = memory_array(capacity_bytes + 1, 1), .at = memory_array(count + 1, sizeof(size_t))};
}

static void keys_add(struct keys *keys, const uint8_t *key, size_t bytes)
{
    assert_true(keys->at[keys->count] + bytes <= keys->capacity_bytes);
    memcpy(keys->bytes + keys->at[keys->count], key, bytes);
    keys->at[keys->count + 1] = keys->at[keys->count] + bytes;
    keys->count++;
}

static void keys_end(struct keys *keys)
{
    free(keys->bytes);
    free(keys->at);
}

/* Few different bytes, zeros among them, and lengths around multiples of eight: prefixes, equal keys, equal blocks. */
static void test_random_keys(void **state)
{
    (void)state;
    static const uint8_t alphabet[] = {0, 0, 1, 'a', 255};
    struct dice dice = {7};
    for (unsigned round = 0; round < 200; round++) {
        struct keys keys;
        size_t count = dice_below(&dice, round % 10 ? 60 : 3000), longest = 1 + dice_below(&dice, 40);
        unsigned letters = 1 + dice_below(&dice, 5);
        keys_begin(&keys, count, count * longest);
        for (size_t index = 0; index < count; index++) {
            uint8_t key[40];
            size_t bytes = dice_below(&dice, (uint32_t)longest + 1);
            for (size_t at = 0; at < bytes; at++)
                key[at] = alphabet[dice_below(&dice, letters)];
            keys_add(&keys, key, bytes);
        }
        check_sorts(&keys);
        keys_end(&keys);
    }
}

/* The longest keys there are, equal up to their end: the recursion is at its deepest. */
static void test_long_keys(void **state)
{
    (void)state;
    enum { COUNT = 40, BYTES = 65536 };
    struct keys keys;
    uint8_t *key = memory_array(BYTES, 1);
    struct dice dice = {8};
    memset(key, 'x', BYTES);
    keys_begin(&keys, COUNT, (size_t)COUNT * BYTES);
    for (unsigned index = 0; index < COUNT; index++) {
        key[BYTES - 1] = (uint8_t)dice_next(&dice);
        keys_add(&keys, key, BYTES - (index % 3 == 0 ? index : 0));
    }
    check_sorts(&keys);
    keys_end(&keys);
    free(key);
}

/* Sorted and reversed keys do not make it slow. */
static void test_ordered_keys(void **state)
{
    (void)state;
    enum { COUNT = 50000 };
    for (int reversed = 0; reversed < 2; reversed++) {
        struct keys keys;
        keys_begin(&keys, COUNT, COUNT * 16);
        for (uint32_t index = 0; index < COUNT; index++) {
            uint32_t number = reversed ? COUNT - index : index;
            uint8_t key[16] = "prefix..";
            for (unsigned digit = 0; digit < 8; digit++, number /= 10)
                key[15 - digit] = (uint8_t)('0' + number % 10);
            keys_add(&keys, key, sizeof key);
        }
        check_sorts(&keys);
        keys_end(&keys);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_random_keys),
        cmocka_unit_test(test_long_keys),
        cmocka_unit_test(test_ordered_keys),
    };
    return cmocka_run_group_tests_name("sort", tests, NULL, NULL);
}
