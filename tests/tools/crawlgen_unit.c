/* crawlgen's promises: the same bytes for the same seed whatever the threads, exact link counts, both
 * shapes the same links, and the shares of the web that DEVELOPERS and benches lean on. The bounds on
 * the shares are our own requirements, not measurements of any real crawl.
 *
 * The program is included, so that it runs in this process with standard output in a memory file. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <sys/mman.h>
#include <sys/stat.h>

#include <cmocka.h>
#include <xxhash.h>

#define main crawlgen_main
#include "../../tools/crawlgen.c"
#undef main

enum { LINKS = 200000 };

struct text {
    char *bytes; /* a zero byte behind */
    size_t size;
};

/* Runs crawlgen with the given options; the result is freed by the caller. */
static struct text run(const char *const options[])
{
    char *argv[16] = {(char *)"crawlgen"};
    int argc = 1;
    while (options[argc - 1]) {
        argv[argc] = (char *)options[argc - 1];
        argc++;
    }
    int file = memfd_create("crawl", 0);
    assert_true(file >= 0);
    fflush(stdout);
    int stdout_kept = dup(STDOUT_FILENO);
    assert_true(stdout_kept >= 0 && dup2(file, STDOUT_FILENO) >= 0);
    int status = crawlgen_main(argc, argv);
    fflush(stdout);
    assert_true(dup2(stdout_kept, STDOUT_FILENO) >= 0);
    close(stdout_kept);
    assert_int_equal(status, WINDROW_OK);
    struct stat about;
    assert_int_equal(fstat(file, &about), 0);
    struct text text = {.bytes = calloc(1, (size_t)about.st_size + 1), .size = (size_t)about.st_size};
    assert_non_null(text.bytes);
    for (size_t got = 0; got < text.size;) {
        ssize_t part = pread(file, text.bytes + got, text.size - got, (off_t)got);
        assert_true(part > 0);
        got += (size_t)part;
    }
    close(file);
    return text;
}

#define RUN(...) run((const char *const[]){__VA_ARGS__, NULL})

static bool same(const struct text *a, const struct text *b)
{
    return a->size == b->size && memcmp(a->bytes, b->bytes, a->size) == 0;
}

static int compare_numbers(const void *left, const void *right)
{
    uint64_t a = *(const uint64_t *)left, b = *(const uint64_t *)right;
    return a < b ? -1 : a > b;
}

/* Sorts, keeps one of each, returns how many. */
static size_t unique(uint64_t *numbers, size_t count)
{
    qsort(numbers, count, sizeof *numbers, compare_numbers);
    size_t kept = 0;
    for (size_t i = 0; i < count; i++)
        if (!kept || numbers[kept - 1] != numbers[i])
            numbers[kept++] = numbers[i];
    return kept;
}

static bool holds(const uint64_t *numbers, size_t count, uint64_t number)
{
    return bsearch(&number, numbers, count, sizeof number, compare_numbers) != NULL;
}

/* What a plain reading of a `lists` dump finds; URLs are told apart as they are spelt. */
struct shares {
    size_t links, bad, self, linkless_lines, lines;
    size_t kept;       /* distinct, no self link */
    size_t inside;     /* of these, in the same host */
    size_t pages, fetched, core;
    size_t fetched_twice;
    size_t longest_line_links;
    size_t core_links; /* kept links to pages with kept links */
};

static size_t host_bytes(const char *url, size_t bytes)
{
    const char *slashes = memmem(url, bytes, "://", 3);
    if (!slashes)
        return 0;
    const char *slash = memchr(slashes + 3, '/', bytes - (size_t)(slashes + 3 - url));
    return slash ? (size_t)(slash - url) : bytes;
}

static struct shares count_shares(const struct text *text)
{
    struct shares shares = {0};
    size_t most = text->size / 8 + 1;
    uint64_t *sources = malloc(most * sizeof *sources), *pages = malloc(most * sizeof *pages);
    uint64_t *core = malloc(most * sizeof *core);
    struct link {
        uint64_t key, source, target;
        bool inside;
    } *links = malloc(most * sizeof *links);
    assert_true(sources && pages && core && links);
    size_t page_count = 0, link_count = 0, core_count = 0;
    for (const char *line = text->bytes; line < text->bytes + text->size;) {
        const char *line_end = strchr(line, '\n');
        assert_non_null(line_end);
        size_t source_bytes = strcspn(line, "\t\n"), line_links = 0;
        uint64_t source = XXH3_64bits(line, source_bytes);
        size_t source_host = host_bytes(line, source_bytes);
        assert_true(source_host > 10);
        sources[shares.lines++] = source;
        pages[page_count++] = source;
        for (const char *field = line + source_bytes; *field == '\t';) {
            size_t bytes = strcspn(++field, "\t\n");
            size_t target_host = host_bytes(field, bytes);
            uint64_t target = XXH3_64bits(field, bytes);
            line_links++;
            if (strncmp(field, "http", 4) != 0 || target_host < 10 || memchr(field, ' ', bytes) ||
                memchr(field, '[', bytes)) {
                shares.bad++;
            } else {
                pages[page_count++] = target;
                if (target == source) {
                    shares.self++;
                } else {
                    links[link_count++] = (struct link){hash_two(source, target), source, target,
                        source_host == target_host && memcmp(line, field, source_host) == 0};
                    core[core_count++] = source;
                }
            }
            field += bytes;
        }
        shares.links += line_links;
        shares.linkless_lines += line_links == 0;
        if (line_links > shares.longest_line_links)
            shares.longest_line_links = line_links;
        line = line_end + 1;
    }
    shares.fetched = unique(sources, shares.lines);
    shares.fetched_twice = shares.lines - shares.fetched;
    shares.pages = unique(pages, page_count);
    shares.core = unique(core, core_count);
    /* The key comes first in the struct: links sort by it. */
    qsort(links, link_count, sizeof *links, compare_numbers);
    for (size_t i = 0; i < link_count; i++)
        if (!i || links[i].key != links[i - 1].key) {
            shares.kept++;
            shares.inside += links[i].inside;
            shares.core_links += holds(core, shares.core, links[i].target);
        }
    free(sources);
    free(pages);
    free(core);
    free(links);
    return shares;
}

static void test_threads_do_not_change_bytes(void **state)
{
    (void)state;
    static const char *const shapes[] = {"--shape=lists", "--shape=pairs", "--slow-mixing"};
    for (size_t i = 0; i < 3; i++) {
        struct text one = RUN("--links=170K", "--threads=1", shapes[i]);
        struct text two = RUN("--links=170K", "--threads=2", shapes[i]);
        struct text five = RUN("--links=170K", "--threads=5", shapes[i]);
        assert_true(one.size > 170000 * 30);
        assert_true(same(&one, &two));
        assert_true(same(&one, &five));
        free(one.bytes);
        free(two.bytes);
        free(five.bytes);
    }
}

static void test_seed_changes_bytes(void **state)
{
    (void)state;
    struct text one = RUN("--links=1K", "--seed=1"), again = RUN("--links=1K"), two = RUN("--links=1K", "--seed=2");
    assert_true(same(&one, &again));
    assert_false(same(&one, &two));
    free(one.bytes);
    free(again.bytes);
    free(two.bytes);
}

static void test_link_count_is_exact_and_a_shorter_crawl_is_a_beginning(void **state)
{
    (void)state;
    static const size_t counts[] = {0, 1, 17, 999, 60000, 123457};
    struct text longest = RUN("--links=130K");
    for (size_t i = 0; i < sizeof counts / sizeof counts[0]; i++) {
        char option[32];
        snprintf(option, sizeof option, "--links=%zu", counts[i]);
        struct text text = RUN(option);
        assert_int_equal(count_shares(&text).links, counts[i]);
        /* all but the newline of the last line, which may be cut short */
        assert_memory_equal(text.bytes, longest.bytes, text.size ? text.size - 1 : 0);
        free(text.bytes);
    }
    free(longest.bytes);
}

static void test_both_shapes_hold_the_same_links(void **state)
{
    (void)state;
    struct text lists = RUN("--links=100K"), pairs = RUN("--links=100K", "--shape=pairs");
    const char *line = lists.bytes, *pair = pairs.bytes;
    size_t links = 0, nofollow = 0;
    while (*line) {
        size_t source_bytes = strcspn(line, "\t\n");
        const char *field = line + source_bytes;
        do {
            assert_memory_equal(pair, line, source_bytes);
            pair += source_bytes;
            if (*field == '\t') {
                size_t bytes = 1 + strcspn(field + 1, "\t\n");
                assert_memory_equal(pair, field, bytes);
                field += bytes;
                pair += bytes;
                links++;
            }
            if (*pair == '\t') {
                assert_memory_equal(pair, "\tnofollow", 9);
                nofollow++;
            }
            pair = strchr(pair, '\n');
            assert_non_null(pair);
            pair++;
        } while (*field == '\t');
        line = field + 1;
    }
    assert_int_equal(*pair, 0);
    assert_int_equal(links, 100000);
    assert_in_range(nofollow, 4000, 6000);
    free(lists.bytes);
    free(pairs.bytes);
}

static void test_shares_of_the_web(void **state)
{
    (void)state;
    static const char *const seeds[] = {"--seed=1", "--seed=2", "--seed=3"};
    for (size_t i = 0; i < 3; i++) {
        struct text text = RUN("--links=200K", seeds[i]);
        struct shares shares = count_shares(&text);
        assert_int_equal(shares.links, LINKS);
        assert_true(shares.pages - shares.fetched > shares.pages / 2);
        assert_in_range(shares.core * 100 / shares.pages, 30, 45);
        assert_in_range(shares.inside * 100 / shares.kept, 65, 85);
        assert_in_range(shares.kept / shares.core, 10, 20);
        assert_in_range(LINKS / shares.pages, 6, 13);
        assert_in_range(shares.bad, LINKS / 5000, LINKS / 200);
        assert_in_range(shares.self, LINKS / 200, LINKS / 10);
        assert_in_range(LINKS - shares.bad - shares.self - shares.kept, LINKS / 50, LINKS / 3);
        assert_in_range(shares.linkless_lines * 1000 / shares.lines, 5, 60);
        assert_true(shares.fetched_twice > 0);
        assert_true(shares.longest_line_links > 200);
        assert_in_range(text.size / LINKS, 40, 80);
        free(text.bytes);
    }
}

static void test_pages_grow_with_links(void **state)
{
    (void)state;
    struct text small = RUN("--links=400K"), large = RUN("--links=1600K");
    struct shares at_small = count_shares(&small), at_large = count_shares(&large);
    assert_in_range(at_large.pages * 100 / at_small.pages, 300, 440);
    free(small.bytes);
    free(large.bytes);
}

/* Closed hosts hand nothing to the frontier: far more of the links end where links go on. */
static void test_slow_mixing_keeps_links_in_the_core(void **state)
{
    (void)state;
    struct text easy = RUN("--links=200K"), slow = RUN("--links=200K", "--slow-mixing");
    struct shares at_easy = count_shares(&easy), at_slow = count_shares(&slow);
    assert_true(at_slow.core_links * 100 / at_slow.kept > at_easy.core_links * 100 / at_easy.kept + 5);
    assert_true(at_slow.core * 100 / at_slow.pages > at_easy.core * 100 / at_easy.pages + 10);
    free(easy.bytes);
    free(slow.bytes);
}

/* A URL never outgrows its room, at the far end of the numbers too (a trillion links, 2^24 rounds). */
static void test_far_rounds(void **state)
{
    (void)state;
    struct model *model = model_make(7, true);
    for (uint64_t round = 1; round < UINT64_C(1) << 25; round = round * 5 + 3) {
        struct piece piece = {.pairs = round & 1};
        round_write(model, &piece, round, 3000);
        assert_int_equal(piece.links, 3000);
        struct piece again = {.pairs = round & 1};
        round_write(model, &again, round, 3000);
        assert_int_equal(piece.end - piece.text, again.end - again.text);
        assert_memory_equal(piece.text, again.text, (size_t)(piece.end - piece.text));
        *piece.end = 0;
        for (const char *field = piece.text; *field; field++) {
            size_t bytes = strcspn(field, "\t\n");
            assert_true(bytes && bytes < URL_BYTES_MAX - WORD_BYTES);
            field += bytes;
        }
        free(piece.text);
        free(again.text);
    }
    model_free(model);
}

static void test_description(void **state)
{
    (void)state;
    struct text text = RUN("--describe");
    assert_non_null(strstr(text.bytes, "navigation"));
    assert_non_null(strstr(text.bytes, "slow mixing"));
    free(text.bytes);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_threads_do_not_change_bytes),
        cmocka_unit_test(test_seed_changes_bytes),
        cmocka_unit_test(test_link_count_is_exact_and_a_shorter_crawl_is_a_beginning),
        cmocka_unit_test(test_both_shapes_hold_the_same_links),
        cmocka_unit_test(test_shares_of_the_web),
        cmocka_unit_test(test_pages_grow_with_links),
        cmocka_unit_test(test_slow_mixing_keeps_links_in_the_core),
        cmocka_unit_test(test_far_rounds),
        cmocka_unit_test(test_description),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
