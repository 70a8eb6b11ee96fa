/* Lists go into blocks and come back; where the cuts fall is what the header says. */
#include "shard/cutter.h"

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdlib.h>
#include <string.h>
#include <xxhash.h>

#include <cmocka.h>

enum { SEGMENT = 7 };

struct list {
    uint64_t host_first, host_end;
    size_t count;
    uint64_t *sources;
};

struct room {
    char *directory, *path;
    struct windrow_cutter cutter;
    uint64_t bytes, checksum;
    char *file;
};

/* Cuts the lists, handing sources over in pieces of `step`. */
static void cut(struct room *room, enum windrow_block_kind kind, uint64_t first_target, const struct list *lists, size_t count, size_t step)
{
    room->directory = scratch_make();
    room->path = scratch_path(room->directory, "blocks");
    assert_int_equal(windrow_cutter_open(&room->cutter, kind, SEGMENT, first_target, room->path), WINDROW_OK);
    for (size_t list = 0; list < count; list++) {
        assert_int_equal(windrow_cutter_list(&room->cutter, lists[list].host_first, lists[list].host_end), WINDROW_OK);
        for (size_t at = 0; at < lists[list].count; at += step) {
            size_t part = lists[list].count - at < step ? lists[list].count - at : step;
            assert_int_equal(windrow_cutter_sources(&room->cutter, lists[list].sources + at, part), WINDROW_OK);
        }
    }
    assert_int_equal(windrow_cutter_finish(&room->cutter, &room->bytes, &room->checksum), WINDROW_OK);
    size_t bytes;
    room->file = scratch_read(room->path, &bytes);
    assert_int_equal(bytes, room->bytes);
    assert_true(XXH3_64bits(room->file, bytes) == room->checksum);
}

static void leave(struct room *room)
{
    windrow_cutter_free(&room->cutter);
    free(room->file);
    free(room->path);
    scratch_remove(room->directory);
}

static size_t block_count(const struct room *room)
{
    return room->cutter.records.bytes / sizeof(struct windrow_block_record);
}

static const struct windrow_block_record *record_of(const struct room *room, size_t block)
{
    return (const struct windrow_block_record *)room->cutter.records.data + block;
}

/* Decodes all blocks and compares them with the lists. */
static void check_lists(const struct room *room, uint64_t first_target, const struct list *lists, size_t count, uint64_t core_pages)
{
    struct windrow_lists decoded = {0};
    uint64_t offset = 0, next = first_target, links = 0;
    size_t list = 0, at = 0;
    for (size_t number = 0; number < block_count(room); number++) {
        const struct windrow_block_record *record = record_of(room, number);
        uint8_t *payload = memory_array(record->payload_bytes, 1);
        struct windrow_block block;
        assert_int_equal(record->offset, offset);
        assert_int_equal(record->segment, SEGMENT);
        assert_true(XXH3_64bits(room->file + offset, record->frame_bytes) == record->checksum);
        assert_int_equal(ZSTD_decompress(payload, record->payload_bytes, room->file + offset, record->frame_bytes), record->payload_bytes);
        assert_int_equal(windrow_block_parse(payload, record->payload_bytes, record, &block), WINDROW_OK);
        assert_int_equal(windrow_block_lists(&block, record, core_pages, &decoded), WINDROW_OK);
        const uint64_t *sources = (const uint64_t *)decoded.sources.data;
        assert_int_equal(record->first_target, next);
        for (uint32_t target = 0; target < record->target_count; target++) {
            uint32_t got = ((const uint32_t *)decoded.counts.data)[target];
            bool goes_on = (record->flags & WINDROW_BLOCK_PIECE) && !(record->flags & WINDROW_BLOCK_LAST_PIECE);
            assert_true(list < count && at + got <= lists[list].count);
            if (got)
                assert_memory_equal(sources, lists[list].sources + at, got * sizeof *sources);
            sources += got;
            links += got;
            at += got;
            if (goes_on)
                continue;
            assert_int_equal(at, lists[list].count);
            list++;
            next++;
            at = 0;
        }
        offset += record->frame_bytes;
        free(payload);
    }
    assert_int_equal(list, count);
    assert_int_equal(offset, room->bytes);
    assert_int_equal(links, room->cutter.links);
    windrow_lists_free(&decoded);
}

static struct list list_make(struct dice *dice, size_t count, uint64_t core_pages, uint64_t host_first, uint64_t host_end)
{
    struct list list = {host_first, host_end, count, memory_array(count, sizeof(uint64_t))};
    uint64_t room = core_pages / (count + 1), source = 0;
    for (size_t index = 0; index < count; index++) {
        source += 1 + (dice_below(dice, 3) ? 0 : dice_next(dice) % room);
        list.sources[index] = source - 1;
    }
    return list;
}

static void lists_free(struct list *lists, size_t count)
{
    for (size_t list = 0; list < count; list++)
        free(lists[list].sources);
    free(lists);
}

static void test_random_lists(void **state)
{
    (void)state;
    struct dice dice = {31};
    for (int round = 0; round < 6; round++) {
        enum { LISTS = 4000 };
        enum windrow_block_kind kind = round % 2 ? WINDROW_BLOCK_RIM : WINDROW_BLOCK_CORE;
        /* Ids of more than 32 bits in some rounds. */
        uint64_t core_pages = round < 3 ? 400000 : UINT64_C(1) << 39, first_target = dice_below(&dice, 1000), host_first = first_target, host_end = first_target;
        struct list *lists = memory_array(LISTS, sizeof *lists);
        for (uint64_t list = 0; list < LISTS; list++) {
            if (first_target + list == host_end) {
                host_first = host_end;
                host_end += 1 + dice_below(&dice, 300);
            }
            size_t count = dice_below(&dice, 200) ? dice_below(&dice, 120) : dice_below(&dice, 2 * WINDROW_CUTTER_LINKS);
            lists[list] = list_make(&dice, count, core_pages, host_first, host_end);
        }
        struct room room, other;
        cut(&room, kind, first_target, lists, LISTS, SIZE_MAX);
        check_lists(&room, first_target, lists, LISTS, core_pages);
        cut(&other, kind, first_target, lists, LISTS, 4096);
        assert_int_equal(room.bytes, other.bytes);
        assert_true(room.checksum == other.checksum); /* how the sources were handed over does not show */
        leave(&room);
        leave(&other);
        lists_free(lists, LISTS);
    }
}

/* Lists of `each` sources, `host` of them a host; gives the targets of the first block. */
static uint32_t first_cut(size_t count, size_t each, uint64_t host)
{
    struct dice dice = {32};
    struct list *lists = memory_array(count, sizeof *lists);
    for (uint64_t list = 0; list < count; list++)
        lists[list] = list_make(&dice, each, 1 << 20, list / host * host, (list / host + 1) * host);
    struct room room;
    cut(&room, WINDROW_BLOCK_CORE, 0, lists, count, SIZE_MAX);
    check_lists(&room, 0, lists, count, 1 << 20);
    uint32_t targets = record_of(&room, 0)->target_count;
    leave(&room);
    lists_free(lists, count);
    return targets;
}

static void test_cuts(void **state)
{
    (void)state;
    /* Lists of 1024 links: three quarters of a block are 96 lists, five quarters 160. */
    assert_int_equal(first_cut(400, 1024, 1), 96);
    assert_int_equal(first_cut(400, 1024, 50), 100);
    assert_int_equal(first_cut(400, 1024, 400), 160);
    assert_int_equal(first_cut(90, 1024, 1), 90);
    assert_int_equal(first_cut(WINDROW_CUTTER_TARGETS + 10, 0, 5), WINDROW_CUTTER_TARGETS);
}

static void check_pieces(size_t before, size_t links, size_t expected)
{
    struct dice dice = {33};
    struct list lists[3] = {list_make(&dice, before, 1 << 21, 0, 3), list_make(&dice, links, 1 << 21, 0, 3), list_make(&dice, 5, 1 << 21, 0, 3)};
    struct room room;
    size_t pieces = 0;
    cut(&room, WINDROW_BLOCK_CORE, 0, lists, 3, 4096);
    check_lists(&room, 0, lists, 3, 1 << 21);
    for (size_t block = 0; block < block_count(&room); block++) {
        const struct windrow_block_record *record = record_of(&room, block);
        if (!(record->flags & WINDROW_BLOCK_PIECE))
            continue;
        pieces++;
        assert_int_equal(record->first_target, 1);
        assert_int_equal(record->target_count, 1);
        bool last = record->flags & WINDROW_BLOCK_LAST_PIECE;
        assert_int_equal(last, pieces == expected);
        assert_true(record->link_count == WINDROW_CUTTER_LINKS || last);
    }
    assert_int_equal(pieces, expected);
    leave(&room);
    for (int list = 0; list < 3; list++)
        free(lists[list].sources);
}

static void test_pieces(void **state)
{
    (void)state;
    check_pieces(0, WINDROW_CUTTER_LINKS, 0); /* as long as a block is still one */
    check_pieces(3, WINDROW_CUTTER_LINKS + 1, 2);
    check_pieces(0, 2 * WINDROW_CUTTER_LINKS, 2);
    check_pieces(70000, 3 * WINDROW_CUTTER_LINKS + 1, 4);
}

static void test_nothing(void **state)
{
    (void)state;
    struct room room;
    cut(&room, WINDROW_BLOCK_RIM, 0, NULL, 0, 1);
    assert_int_equal(room.bytes, 0);
    assert_int_equal(block_count(&room), 0);
    leave(&room);
    struct list empty[2] = {{0, 2, 0, NULL}, {0, 2, 0, NULL}};
    cut(&room, WINDROW_BLOCK_CORE, 0, empty, 2, 1);
    check_lists(&room, 0, empty, 2, 2);
    assert_int_equal(block_count(&room), 1);
    leave(&room);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_random_lists),
        cmocka_unit_test(test_cuts),
        cmocka_unit_test(test_pieces),
        cmocka_unit_test(test_nothing),
    };
    return cmocka_run_group_tests_name("cutter", tests, NULL, NULL);
}
