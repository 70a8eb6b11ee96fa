/* Blocks come back as they were coded; damaged ones are noticed, never believed, and never read beyond. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <unistd.h>

#include <cmocka.h>

#include "store/block.h"
#include "../common/graph.h"
#include "../common/memory.h"

/* The lists of a block, as the encoder takes them. */
struct lists {
    struct windrow_block_input input;
    uint64_t *sources, *near_first, *near_end;
    uint32_t *counts;
    uint64_t link_count, core_pages;
};

static uint64_t dice_wide(struct dice *dice, uint64_t bound)
{
    return dice_next(dice) % bound;
}

/* Lists of single sources and consecutive ones, with gaps from tiny to huge. */
static struct lists lists_random(struct dice *dice, enum windrow_block_kind kind, uint32_t target_count,
                                 uint64_t core_pages, uint32_t most)
{
    struct lists lists = {.core_pages = core_pages};
    lists.sources = memory_array((size_t)target_count * (most + 40), 8);
    lists.counts = memory_array(target_count, 4);
    lists.near_first = memory_array(target_count, 8);
    lists.near_end = memory_array(target_count, 8);
    uint64_t first_target = dice_wide(dice, core_pages - target_count + 1), host_first = first_target;
    for (uint32_t t = 0; t < target_count; t++) {
        if (dice_below(dice, 10) == 0)
            host_first = first_target + t;
        lists.near_first[t] = host_first;
        lists.near_end[t] = host_first + dice_below(dice, 60) < first_target + target_count
                                ? host_first + 60 : first_target + target_count;
        uint32_t wanted = dice_below(dice, 3) ? dice_below(dice, most + 1) : 0;
        uint64_t source = dice_below(dice, 2) ? lists.near_first[t] : dice_wide(dice, core_pages);
        while (lists.counts[t] < wanted) {
            uint32_t length = dice_below(dice, 3) ? 1 : dice_below(dice, 40);
            for (uint32_t i = 0; i < length && source < core_pages; i++, source++) {
                lists.sources[lists.link_count++] = source;
                lists.counts[t]++;
            }
            if (source >= core_pages)
                break;
            source += dice_below(dice, 3) ? dice_below(dice, 4) : dice_wide(dice, core_pages - source);
        }
    }
    lists.input = (struct windrow_block_input){
        .kind = kind, .first_target = first_target, .target_count = target_count, .sources = lists.sources,
        .counts = lists.counts, .near_first = lists.near_first, .near_end = lists.near_end,
    };
    return lists;
}

static void lists_free(struct lists *lists)
{
    free(lists->sources);
    free(lists->counts);
    free(lists->near_first);
    free(lists->near_end);
}

static struct windrow_block_record record_of(const struct lists *lists, const struct windrow_buffer *payload)
{
    uint32_t flags = 0;
    memcpy(&flags, payload->data + 44, 4);
    return (struct windrow_block_record){.first_target = lists->input.first_target, .link_count = lists->link_count,
                                         .target_count = lists->input.target_count, .flags = flags,
                                         .payload_bytes = (uint32_t)payload->bytes};
}

static void assert_round_trip(struct lists *lists, struct windrow_lists *decoded)
{
    struct windrow_buffer payload = {0};
    struct windrow_block block;
    assert_int_equal(windrow_block_encode(&lists->input, &payload), WINDROW_OK);
    struct windrow_block_record record = record_of(lists, &payload);
    assert_int_equal(windrow_block_parse(payload.data, payload.bytes, &record, &block), WINDROW_OK);
    assert_int_equal(windrow_block_lists(&block, &record, lists->core_pages, decoded), WINDROW_OK);
    assert_int_equal(decoded->sources.bytes, lists->link_count * 8);
    assert_memory_equal(decoded->counts.data, lists->counts, lists->input.target_count * 4);
    if (lists->link_count)
        assert_memory_equal(decoded->sources.data, lists->sources, lists->link_count * 8);
    windrow_buffer_free(&payload);
}

static void lists_come_back_as_they_were(void **state)
{
    (void)state;
    static const uint64_t sizes[] = {70, 3000, UINT64_C(1) << 31, (UINT64_C(1) << 32) + 5, UINT64_C(1) << 45};
    struct dice dice = {1};
    struct windrow_lists decoded = {0};
    for (int round = 0; round < 600; round++)
        for (size_t s = 0; s < sizeof sizes / sizeof *sizes; s++) {
            struct lists lists = lists_random(&dice, round % 2 ? WINDROW_BLOCK_CORE : WINDROW_BLOCK_RIM,
                                              1 + dice_below(&dice, 50), sizes[s], 1 + dice_below(&dice, 60));
            assert_round_trip(&lists, &decoded);
            lists_free(&lists);
        }
    windrow_lists_free(&decoded);
}

static void a_piece_comes_back_as_it_was(void **state)
{
    (void)state;
    struct dice dice = {2};
    struct windrow_lists decoded = {0};
    for (int round = 0; round < 200; round++) {
        struct lists lists = lists_random(&dice, WINDROW_BLOCK_CORE, 1, 100000, 2000);
        lists.input.flags = WINDROW_BLOCK_PIECE | (round % 2 ? WINDROW_BLOCK_LAST_PIECE : 0);
        assert_round_trip(&lists, &decoded);
        lists_free(&lists);
    }
    windrow_lists_free(&decoded);
}

/* A run across the border of the near range is cut there: beyond, a sweep must not update in place. */
static void runs_of_a_core_block_stay_near(void **state)
{
    (void)state;
    uint64_t sources[40], near_first = 110, near_end = 125;
    uint32_t count = 40;
    for (uint64_t i = 0; i < 40; i++)
        sources[i] = 100 + i;
    struct windrow_block_input input = {.kind = WINDROW_BLOCK_CORE, .first_target = 105, .target_count = 1,
                                        .sources = sources, .counts = &count, .near_first = &near_first, .near_end = &near_end};
    struct windrow_buffer payload = {0};
    assert_int_equal(windrow_block_encode(&input, &payload), WINDROW_OK);
    struct windrow_block_record record = {.first_target = 105, .link_count = 40, .target_count = 1};
    struct windrow_block block;
    assert_int_equal(windrow_block_parse(payload.data, payload.bytes, &record, &block), WINDROW_OK);
    assert_int_equal(block.runs.count, 2);
    assert_int_equal(block.near_gaps.count, 0);
    assert_int_equal(block.far_gaps.count, 25);
    assert_int_equal(block.run_base, 110);
    uint32_t numbers[2 + 4];
    windrow_stream_decode(&block.runs, numbers);
    assert_int_equal(numbers[0], 0);
    assert_int_equal(numbers[1], 15 - WINDROW_RUN_LEAST);
    windrow_buffer_free(&payload);
}

static void the_fast_decoder_agrees_with_the_plain_one(void **state)
{
    (void)state;
    struct dice dice = {3};
    for (int round = 0; round < 3000; round++) {
        uint32_t count = dice_below(&dice, 300), data_bytes = dice_below(&dice, 4 * count + 20);
        struct windrow_stream stream = {.count = count, .data_bytes = data_bytes};
        uint8_t *control = memory_array((count + 3) / 4, 1), *data = memory_array(data_bytes, 1);
        for (uint32_t i = 0; i < (count + 3) / 4; i++)
            control[i] = (uint8_t)dice_next(&dice);
        for (uint32_t i = 0; i < data_bytes; i++)
            data[i] = (uint8_t)dice_next(&dice);
        stream.control = control;
        stream.data = data;
        uint32_t *fast = memory_array(count + 4, 4), *plain = memory_array(count + 4, 4);
        windrow_stream_decode(&stream, fast);
        windrow_stream_decode_plain(&stream, plain);
        assert_memory_equal(fast, plain, count * 4);
        free(fast);
        free(plain);
        free(control);
        free(data);
    }
}

/* The payload ends where an unmapped page begins: a byte read beyond it ends the test. */
static void damage_is_noticed_and_nothing_is_read_beyond(void **state)
{
    (void)state;
    size_t page_bytes = (size_t)sysconf(_SC_PAGESIZE), room_bytes = 64 * page_bytes;
    uint8_t *room = mmap(NULL, room_bytes + page_bytes, PROT_READ | PROT_WRITE, MAP_PRIVATE | MAP_ANONYMOUS, -1, 0);
    assert_true(room != MAP_FAILED);
    assert_int_equal(mprotect(room + room_bytes, page_bytes, PROT_NONE), 0);
    struct dice dice = {4};
    struct windrow_lists decoded = {0};
    unsigned noticed = 0, harmless = 0;
    for (int round = 0; round < 20000; round++) {
        uint64_t core_pages = round % 3 ? 500 : UINT64_C(1) << 40;
        struct lists lists = lists_random(&dice, WINDROW_BLOCK_CORE, 1 + dice_below(&dice, 20), core_pages, 30);
        struct windrow_buffer payload = {0};
        assert_int_equal(windrow_block_encode(&lists.input, &payload), WINDROW_OK);
        struct windrow_block_record record = record_of(&lists, &payload);
        size_t bytes = round % 5 ? payload.bytes : dice_below(&dice, (uint32_t)payload.bytes);
        assert_true(bytes <= room_bytes);
        uint8_t *at = room + room_bytes - bytes;
        memcpy(at, payload.data, bytes);
        if (bytes == payload.bytes)
            for (uint32_t hits = 1 + dice_below(&dice, 3); hits > 0; hits--)
                at[dice_below(&dice, (uint32_t)bytes)] ^= (uint8_t)(1u << dice_below(&dice, 8));
        struct windrow_block block;
        enum windrow_status status = windrow_block_parse(at, bytes, &record, &block);
        if (bytes < payload.bytes)
            assert_int_equal(status, WINDROW_DAMAGED);
        if (!status) {
            uint32_t *numbers = memory_array((size_t)block.far_gaps.count + 4, 4);
            windrow_stream_decode(&block.far_gaps, numbers);
            free(numbers);
            status = windrow_block_lists(&block, &record, core_pages, &decoded);
        }
        if (status == WINDROW_DAMAGED) {
            noticed++;
        } else {
            /* A changed gap may describe another graph; the frame's checksum is there to tell. */
            harmless++;
            const uint64_t *sources = (const uint64_t *)(const void *)decoded.sources.data;
            const uint32_t *counts = (const uint32_t *)(const void *)decoded.counts.data;
            uint64_t link = 0;
            for (uint32_t t = 0; t < lists.input.target_count; t++)
                for (uint32_t i = 0; i < counts[t]; i++, link++) {
                    assert_true(sources[link] < core_pages);
                    assert_true(i == 0 || sources[link] > sources[link - 1]);
                }
            assert_int_equal(link, lists.link_count);
        }
        windrow_buffer_free(&payload);
        lists_free(&lists);
    }
    assert_true(noticed > 8000 && harmless > 100);
    windrow_lists_free(&decoded);
    munmap(room, room_bytes + page_bytes);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(lists_come_back_as_they_were),
        cmocka_unit_test(a_piece_comes_back_as_it_was),
        cmocka_unit_test(runs_of_a_core_block_stay_near),
        cmocka_unit_test(the_fast_decoder_agrees_with_the_plain_one),
        cmocka_unit_test(damage_is_noticed_and_nothing_is_read_beyond),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
