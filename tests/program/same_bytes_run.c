/* One crawl, one store, one ranking: the same bytes whatever the threads, the memory, the order of the
 * lines, the way the dump comes in. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <stdlib.h>
#include <string.h>

#include "../common/memory.h"
#include "../common/program.h"
#include "../common/scratch.h"

struct room {
    char *directory;
    char *dump;   /* pairs, from crawlgen */
    char *store;  /* of it, by the defaults */
    char *scores; /* of that store */
};

static char *scores_of(const char *store)
{
    struct outcome outcome = WINDROW("score", "--all", store);
    outcome_expect(&outcome, 0);
    char *text = outcome.out;
    outcome.out = NULL;
    outcome_free(&outcome);
    return text;
}

static int set_up(void **state)
{
    struct room *room = memory_array(1, sizeof *room);
    room->directory = scratch_make();
    room->dump = scratch_path(room->directory, "dump.tsv");
    room->store = scratch_path(room->directory, "store");
    pid_t generator = program_start(NULL, room->dump, NULL,
                                    ARGUMENTS("crawlgen", "--links", "300K", "--shape", "pairs", "--seed", "5"));
    assert_int_equal(program_wait(generator), 0);
    MUST_WINDROW("shard", "--quiet", "--out", room->store, room->dump);
    char *ranked = scratch_path(room->directory, "ranked");
    scratch_copy(room->store, ranked);
    MUST_WINDROW("rank", "--quiet", ranked);
    room->scores = scores_of(ranked);
    free(ranked);
    *state = room;
    return 0;
}

static int tear_down(void **state)
{
    struct room *room = *state;
    free(room->dump);
    free(room->store);
    free(room->scores);
    scratch_remove(room->directory);
    free(room);
    return 0;
}

/* Shards in another way, and holds the store against the first one. */
static void expect_same_store(const struct room *room, const char *input, const char *const *arguments)
{
    char *other = scratch_path(room->directory, "other");
    const char *all[16] = {"windrow", "shard", "--quiet", "--out", other};
    size_t count = 5;
    for (; *arguments != NULL; arguments++)
        all[count++] = *arguments;
    all[count] = NULL;
    program_must(input, all);
    scratch_expect_same_store(room->store, other);
    scratch_remove(other);
}
#define SAME_STORE(room, input, ...) expect_same_store(room, input, ARGUMENTS(__VA_ARGS__))

static void test_threads_and_memory_of_shard(void **state)
{
    const struct room *room = *state;
    SAME_STORE(room, NULL, "--threads", "1", room->dump);
    SAME_STORE(room, NULL, "--threads", "2", "--memory", "64M", room->dump);
    SAME_STORE(room, NULL, "--threads", "5", "--memory", "1G", room->dump);
}

static void test_standard_input(void **state)
{
    const struct room *room = *state;
    SAME_STORE(room, room->dump, "-");
}

static void test_order_of_lines(void **state)
{
    const struct room *room = *state;
    char *sorted = scratch_path(room->directory, "sorted.tsv"), *mixed = scratch_path(room->directory, "mixed.tsv");
    MUST("env", "LC_ALL=C", "sort", "-o", sorted, room->dump);
    SAME_STORE(room, NULL, "--shape", "pairs", sorted);
    MUST("shuf", "--random-source", room->dump, "-o", mixed, room->dump);
    SAME_STORE(room, NULL, "--shape", "pairs", "--memory", "64M", mixed);
    free(sorted);
    free(mixed);
}

static void test_several_files(void **state)
{
    const struct room *room = *state;
    char *a = scratch_path(room->directory, "part-aa"), *b = scratch_path(room->directory, "part-ab");
    char *c = scratch_path(room->directory, "part-ac"), *prefix = scratch_path(room->directory, "part-");
    MUST("split", "-n", "l/3", room->dump, prefix);
    MUST("gzip", b);
    char *b_packed = memory_text("%s.gz", b);
    SAME_STORE(room, NULL, "--shape", "pairs", c, b_packed, a);
    free(a);
    free(b);
    free(c);
    free(prefix);
    free(b_packed);
}

/* The same links told as lists: a line a page, or a line a few targets. */
static void test_shapes(void **state)
{
    const struct room *room = *state;
    char *followed = scratch_path(room->directory, "followed.tsv"), *lists = scratch_path(room->directory, "lists.tsv");
    char *from_pairs = scratch_path(room->directory, "from-pairs"), *from_lists = scratch_path(room->directory, "from-lists");
    /* Lists cannot say nofollow, so those lines go from both. */
    char *filter = memory_text("awk -F '\\t' 'NF < 3' '%s' >'%s'", room->dump, followed);
    char *fold = memory_text("awk -F '\\t' '$1 == last && NF == 2 && n++ < 7 { printf \"\\t%%s\", $2; next }"
                             "{ printf \"%%s%%s\", (NR > 1 ? \"\\n\" : \"\"), $0; last = $1; n = 0 } END { print \"\" }' '%s' >'%s'",
                             followed, lists);
    MUST("sh", "-c", filter);
    MUST("sh", "-c", fold);
    MUST_WINDROW("shard", "--quiet", "--shape", "pairs", "--out", from_pairs, followed);
    MUST_WINDROW("shard", "--quiet", "--shape", "lists", "--out", from_lists, lists);
    scratch_expect_same_store(from_pairs, from_lists);
    free(followed);
    free(lists);
    free(from_pairs);
    free(from_lists);
    free(filter);
    free(fold);
}

static void test_threads_and_memory_of_rank(void **state)
{
    static const char *const ways[][4] = {
        {"--threads", "1", "--memory", "2G"}, {"--threads", "2", "--memory", "64M"}, {"--threads", "4", "--memory", "1G"},
    };
    const struct room *room = *state;
    for (size_t i = 0; i < 3; i++) {
        char *store = scratch_path(room->directory, "again");
        scratch_copy(room->store, store);
        MUST_WINDROW("rank", "--quiet", ways[i][0], ways[i][1], ways[i][2], ways[i][3], store);
        char *scores = scores_of(store);
        if (strcmp(scores, room->scores) != 0)
            fail_msg("other scores with %s %s %s %s", ways[i][0], ways[i][1], ways[i][2], ways[i][3]);
        free(scores);
        scratch_remove(store);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_threads_and_memory_of_shard),
        cmocka_unit_test(test_standard_input),
        cmocka_unit_test(test_order_of_lines),
        cmocka_unit_test(test_several_files),
        cmocka_unit_test(test_shapes),
        cmocka_unit_test(test_threads_and_memory_of_rank),
    };
    return cmocka_run_group_tests_name("same bytes", tests, set_up, tear_down);
}
