/* A store that was grown equals, byte for byte, one that is made at once from the lines that count: the old
 * ones but for pages that were fetched again, and the new ones. Random webs of few pages, so that everything
 * meets: pages fetched again, pages that only an old link held, aliases of then and now, takedowns. */
#include "store/store.h"
#include "windrow.h"
#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

enum { PAGES = 60, LINES_MOST = 40, NONE = 255 };

struct line {
    uint8_t source, targets[8];
    uint32_t target_count;
};

struct dump {
    struct line lines[LINES_MOST];
    uint32_t count;
};

/* In the order of their numbers, pages are in host order. */
static char *url_of(uint32_t page)
{
    return memory_text("http://h%u.example/p%u", page / 10, page % 10);
}

static struct dump dump_random(struct dice *dice, uint32_t lines)
{
    struct dump dump = {.count = lines};
    for (uint32_t at = 0; at < lines; at++) {
        struct line *line = &dump.lines[at];
        line->source = (uint8_t)dice_below(dice, PAGES);
        line->target_count = dice_below(dice, 6);
        for (uint32_t target = 0; target < line->target_count; target++)
            line->targets[target] = (uint8_t)dice_below(dice, PAGES);
    }
    return dump;
}

static void put(FILE *file, uint32_t page)
{
    char *url = url_of(page);
    fputs(url, file);
    free(url);
}

/* Writes the lines whose source is not among `without` (folded by `stands_for`). */
static void dump_write(const char *path, const struct dump *dump, const bool *without, const uint8_t *stands_for)
{
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    for (uint32_t at = 0; at < dump->count; at++) {
        const struct line *line = &dump->lines[at];
        if (without && without[stands_for[line->source]])
            continue;
        put(file, line->source);
        for (uint32_t target = 0; target < line->target_count; target++) {
            fputc('\t', file);
            put(file, line->targets[target]);
        }
        fputc('\n', file);
    }
    fclose(file);
}

static void aliases_write(const char *path, const uint8_t (*pairs)[2], uint32_t count)
{
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    for (uint32_t at = 0; at < count; at++) {
        put(file, pairs[at][0]);
        fputc('\t', file);
        put(file, pairs[at][1]);
        fputc('\n', file);
    }
    fclose(file);
}

/* The plain way: smallest target, chains to their end, cycles to their smallest page. */
static void resolve(const uint8_t (*pairs)[2], uint32_t count, uint8_t *stands_for)
{
    uint8_t next[PAGES];
    memset(next, NONE, sizeof next);
    for (uint32_t at = 0; at < count; at++)
        if (pairs[at][0] != pairs[at][1] && (next[pairs[at][0]] == NONE || pairs[at][1] < next[pairs[at][0]]))
            next[pairs[at][0]] = pairs[at][1];
    for (uint32_t page = 0; page < PAGES; page++) {
        uint8_t end = (uint8_t)page;
        for (int step = 0; step < PAGES && next[end] != NONE; step++)
            end = next[end];
        if (next[end] != NONE) { /* in a cycle: once around it */
            uint8_t smallest = end, at = next[end];
            for (; at != end; at = next[at])
                if (at < smallest)
                    smallest = at;
            end = smallest;
        }
        stands_for[page] = end;
    }
}

static uint64_t shard(const char *out, const char *const *dumps, size_t dump_count, const char *aliases, const char *drop, const char *add)
{
    struct windrow_shard_options options;
    windrow_shard_defaults(&options);
    options.out = out;
    options.dumps = dumps;
    options.dump_count = dump_count;
    options.aliases = aliases;
    options.drop = drop;
    options.add = add;
    options.memory_bytes = 64 << 20;
    options.threads = 2;
    if (windrow_shard(&options, NULL))
        fail_msg("%s", windrow_message());
    struct windrow_store *store;
    if (windrow_store_open(out, &store))
        fail_msg("%s", windrow_message());
    uint64_t fingerprint = windrow_store_facts(store)->fingerprint;
    windrow_store_close(store);
    return fingerprint;
}

/* What a trial has besides pages and links. */
enum { THEN_ALIASES = 1, NOW_ALIASES = 2, TAKEDOWNS = 4 };

static void trial(uint64_t seed, unsigned with)
{
    struct dice dice = {seed};
    char *scratch = scratch_make();
    char *old_path = scratch_path(scratch, "old"), *kept_path = scratch_path(scratch, "kept"), *new_path = scratch_path(scratch, "new");
    char *then_path = scratch_path(scratch, "then"), *both_path = scratch_path(scratch, "both");
    char *drop_path = scratch_path(scratch, "drop"), *a = scratch_path(scratch, "a"), *b = scratch_path(scratch, "b"), *c = scratch_path(scratch, "c");
    uint32_t then_count = with & THEN_ALIASES ? 1 + dice_below(&dice, 5) : 0, now_count = with & NOW_ALIASES ? 1 + dice_below(&dice, 5) : 0;
    uint8_t pairs[10][2], stands_for[PAGES];
    for (uint32_t at = 0; at < then_count + now_count; at++) {
        pairs[at][0] = (uint8_t)dice_below(&dice, PAGES);
        pairs[at][1] = (uint8_t)dice_below(&dice, PAGES);
    }
    /* A page has one TO at most over both files, for the old store remembers where a chain ended, not each line. */
    uint32_t kept = 0, kept_then = 0;
    for (uint32_t at = 0; at < then_count + now_count; at++) {
        bool seen = false;
        for (uint32_t before = 0; before < kept; before++)
            seen |= pairs[before][0] == pairs[at][0];
        if (seen)
            continue;
        memmove(pairs[kept], pairs[at], 2);
        kept++;
        kept_then += at < then_count;
    }
    /* Nor does a cycle close over both. */
    resolve((const uint8_t(*)[2])pairs, kept, stands_for);
    for (uint32_t at = 0; at < kept; at++)
        if (stands_for[pairs[at][0]] == pairs[at][0])
            kept_then = kept = 0;
    resolve((const uint8_t(*)[2])pairs, kept, stands_for);
    aliases_write(then_path, (const uint8_t(*)[2])pairs, kept_then);
    aliases_write(both_path, (const uint8_t(*)[2])pairs, kept);

    struct dump old = dump_random(&dice, 1 + dice_below(&dice, LINES_MOST)), new = dump_random(&dice, dice_below(&dice, LINES_MOST / 2));
    bool fetched[PAGES] = {0};
    FILE *drop = fopen(drop_path, "w");
    assert_non_null(drop);
    bool dropped[PAGES] = {0};
    for (int take = 0; with & TAKEDOWNS && take < 3; take++) {
        uint32_t page = dice_below(&dice, PAGES);
        bool was_alias = false; /* what the old store has folded it does not know by name any more */
        for (uint32_t at = 0; at < kept_then; at++)
            was_alias |= pairs[at][0] == page;
        if (was_alias)
            continue;
        dropped[page] = true;
        put(drop, page);
        fputc('\n', drop);
    }
    fclose(drop);
    /* A line whose source is taken down fetches nothing. */
    for (uint32_t at = 0; at < new.count; at++)
        if (!dropped[new.lines[at].source] && !dropped[stands_for[new.lines[at].source]])
            fetched[stands_for[new.lines[at].source]] = true;
    dump_write(old_path, &old, NULL, NULL);
    dump_write(kept_path, &old, fetched, stands_for);
    dump_write(new_path, &new, NULL, NULL);
    const char *drop_file = with & TAKEDOWNS ? drop_path : NULL;
    shard(a, (const char *[]){old_path}, 1, kept_then ? then_path : NULL, NULL, NULL);
    /* The old store knows the aliases of its pages; of those that had nothing to fold then it must be told again. */
    uint64_t grown = shard(b, (const char *[]){new_path}, 1, kept ? both_path : NULL, drop_file, a);
    uint64_t at_once = shard(c, (const char *[]){kept_path, new_path}, 2, kept ? both_path : NULL, drop_file, NULL);
    if (grown != at_once)
        fail_msg("seed %llu, with %u: the grown store differs", (unsigned long long)seed, with);
    free(old_path);
    free(kept_path);
    free(new_path);
    free(then_path);
    free(both_path);
    free(drop_path);
    free(a);
    free(b);
    free(c);
    scratch_remove(scratch);
}

static void test_pages_fetched_again(void **state)
{
    (void)state;
    for (uint64_t seed = 1; seed <= 6; seed++)
        trial(seed, 0);
}

static void test_takedowns(void **state)
{
    (void)state;
    for (uint64_t seed = 101; seed <= 106; seed++)
        trial(seed, TAKEDOWNS);
}

static void test_aliases_of_then_and_now(void **state)
{
    (void)state;
    for (uint64_t seed = 201; seed <= 205; seed++)
        trial(seed, THEN_ALIASES);
    for (uint64_t seed = 301; seed <= 305; seed++)
        trial(seed, NOW_ALIASES);
    for (uint64_t seed = 401; seed <= 405; seed++)
        trial(seed, THEN_ALIASES | NOW_ALIASES);
}

static void test_all_together(void **state)
{
    (void)state;
    for (uint64_t seed = 501; seed <= 508; seed++)
        trial(seed, THEN_ALIASES | NOW_ALIASES | TAKEDOWNS);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_pages_fetched_again),
        cmocka_unit_test(test_takedowns),
        cmocka_unit_test(test_aliases_of_then_and_now),
        cmocka_unit_test(test_all_together),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
