/* Variants of URLs: what they share, which one stands for all, and that sorting on disk finds what a plain look at all
 * pairs finds. */
#include "shard/variants.h"

#include "base/file.h"
#include "url/keyer.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

static char directory[] = "/tmp/windrow-variants-XXXXXX";

static char *path_of(const char *name)
{
    char *path = windrow_path(directory, "%s", name);
    assert_non_null(path);
    return path;
}

static int directory_make(void **state)
{
    (void)state;
    return mkdtemp(directory) ? 0 : -1;
}

static int directory_drop(void **state)
{
    (void)state;
    return windrow_directory_remove(directory) == WINDROW_OK ? 0 : -1;
}

static size_t shared_of(const char *url, uint8_t *out, unsigned *features)
{
    struct windrow_keyer *keyer;
    const char *key;
    size_t key_bytes;
    assert_int_equal(windrow_keyer_create(&keyer), WINDROW_OK);
    assert_int_equal(windrow_keyer_key(keyer, url, strlen(url), &key, &key_bytes), WINDROW_URL_OK);
    size_t bytes = windrow_variants_shared((const uint8_t *)key, key_bytes, out, features);
    assert_true(bytes <= key_bytes);
    windrow_keyer_destroy(keyer);
    return bytes;
}

static bool same(const char *a, const char *b)
{
    uint8_t shared_a[1024], shared_b[1024];
    unsigned features;
    size_t bytes_a = shared_of(a, shared_a, &features), bytes_b = shared_of(b, shared_b, &features);
    return bytes_a == bytes_b && memcmp(shared_a, shared_b, bytes_a) == 0;
}

static unsigned features_of(const char *url)
{
    uint8_t shared[1024];
    unsigned features;
    shared_of(url, shared, &features);
    return features;
}

static void what_variants_share(void **state)
{
    (void)state;
    assert_true(same("http://a.example/x", "https://a.example/x"));
    assert_true(same("http://a.example/x", "http://www.a.example/x"));
    assert_true(same("http://a.example/x", "http://a.example/x/"));
    assert_true(same("http://a.example/x?q=/", "https://www.a.example/x/?q=/"));
    assert_true(same("http://a.example", "https://a.example/"));
    /* What looks like it and is not. */
    assert_false(same("http://a.example/x", "http://a.example/X"));
    assert_false(same("http://a.example/x?q", "http://a.example/x?q/"));
    assert_false(same("http://a.example/x", "http://a.example/x?"));
    assert_false(same("http://a.example/x", "http://a.example/x//"));
    assert_false(same("http://a.example/x", "http://www.www.a.example/x"));
    assert_false(same("http://a.example/x", "http://www2.a.example/x"));
    assert_false(same("http://a.example/x", "http://a.www.example/x"));
    assert_false(same("http://a.example/x", "http://wwwa.example/x"));
    assert_false(same("http://www/", "http://w/"));
    /* One port speaks one scheme. */
    assert_false(same("http://a.example:8080/x", "https://a.example:8080/x"));
    assert_false(same("http://a.example:8080/x", "http://a.example/x"));
    assert_true(same("http://a.example:8080/x", "http://www.a.example:8080/x/"));
    /* A port whose bytes look like the beginning of a query or a path: 16175 is 3F 2F. */
    assert_true(same("http://a.example:16175/x", "http://a.example:16175/x/"));
    assert_false(same("http://a.example:16175/x", "http://a.example:16174/x"));
}

static void which_one_stands_for_all(void **state)
{
    (void)state;
    assert_true(features_of("https://www.a.example/x") > features_of("http://a.example/x/"));
    assert_true(features_of("http://a.example/x") > features_of("http://www.a.example/x/"));
    assert_true(features_of("http://a.example/x/") > features_of("http://a.example/x"));
    /* A root has no slash to lose. */
    assert_int_equal(features_of("http://a.example/"), features_of("http://a.example/x"));
}

static void write_text(const char *path, const char *text)
{
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    assert_true(fputs(text, file) >= 0);
    assert_int_equal(fclose(file), 0);
}

static void shard(const char *dump, const char *store, const char *aliases)
{
    struct windrow_shard_options options;
    windrow_shard_defaults(&options);
    options.out = store;
    options.dumps = &dump;
    options.dump_count = 1;
    options.shape = WINDROW_SHAPE_LISTS;
    options.memory_bytes = UINT64_C(64) << 20;
    options.threads = 2;
    options.aliases = aliases;
    assert_int_equal(windrow_shard(&options, NULL), WINDROW_OK);
}

static void expect_file(const char *path, const char *expected)
{
    struct windrow_buffer text = {0};
    assert_int_equal(windrow_file_load(path, 1 << 26, &text), WINDROW_OK);
    assert_int_equal(windrow_buffer_append(&text, "", 1), WINDROW_OK);
    assert_string_equal((const char *)text.data, expected);
    windrow_buffer_free(&text);
}

static void lines_and_counts(void **state)
{
    (void)state;
    char *dump = path_of("few.tsv"), *store = path_of("few"), *lines = path_of("few.aliases");
    write_text(dump, "http://www.b.example/p\thttp://b.example/p\thttps://b.example/p/\thttps://b.example/p\n"
                     "http://a.example/\thttps://a.example/\thttp://c.example/d\thttp://c.example/d/\thttp://c.example/e\n"
                     "http://d.example/\thttp://www.d.example/\thttp://d.example:81/\n");
    shard(dump, store, NULL);
    struct windrow_variant_counts counts;
    assert_int_equal(windrow_suggest_aliases(store, UINT64_C(64) << 20, lines, &counts, NULL), WINDROW_OK);
    /* Host order of FROM; a host stands right before its subdomains. */
    expect_file(lines, "http://a.example/\thttps://a.example/\n"
                       "http://b.example/p\thttps://b.example/p/\n"
                       "https://b.example/p\thttps://b.example/p/\n"
                       "http://www.b.example/p\thttps://b.example/p/\n"
                       "http://c.example/d\thttp://c.example/d/\n"
                       "http://www.d.example/\thttp://d.example/\n");
    assert_int_equal(counts.pages, 6);
    assert_int_equal(counts.by_scheme, 1);
    assert_int_equal(counts.by_www, 1);
    assert_int_equal(counts.by_slash, 2);
    assert_int_equal(counts.by_several, 2);
    free(dump);
    free(store);
    free(lines);
}

struct made {
    char url[64];
    unsigned group, features;
};

static int by_group(const void *a, const void *b)
{
    const struct made *left = a, *right = b;
    if (left->group != right->group)
        return left->group < right->group ? -1 : 1;
    return (int)right->features - (int)left->features;
}

/* So many pages that sorting in little memory goes to the disk; against counts that need no sorting of keys. Fed back
 * as aliases, the lines leave a store without variants. */
static void on_disk_as_in_memory(void **state)
{
    (void)state;
    enum { PAGES = 30000 };
    char *dump = path_of("many.tsv"), *store = path_of("many"), *lines = path_of("many.aliases"), *folded = path_of("folded"), *scratch = path_of("scratch");
    struct made *made = calloc(PAGES, sizeof *made);
    assert_non_null(made);
    FILE *file = fopen(dump, "w");
    assert_non_null(file);
    uint64_t random = 7;
    for (int page = 0; page < PAGES; page++) {
        random = random * UINT64_C(6364136223846793005) + UINT64_C(1442695040888963407);
        made[page].group = (unsigned)(random >> 33) % 20000;
        made[page].features = (unsigned)(random >> 55) & 7;
        snprintf(made[page].url, sizeof made[page].url, "http%s://%sh%u.example/p%u%s", made[page].features & WINDROW_VARIANT_HTTPS ? "s" : "",
                 made[page].features & WINDROW_VARIANT_BARE ? "" : "www.", made[page].group % 97, made[page].group,
                 made[page].features & WINDROW_VARIANT_SLASH ? "/" : "");
        fprintf(file, "%s\thttps://hub.example/\n", made[page].url);
    }
    assert_int_equal(fclose(file), 0);
    qsort(made, PAGES, sizeof *made, by_group);
    struct windrow_variant_counts expected = {.one_in = 1}, counts;
    for (int page = 1, first = 0; page < PAGES; page++) {
        if (made[page].group != made[first].group)
            first = page;
        else if (made[page].features != made[page - 1].features) /* the same page again is no variant */
            windrow_variants_count(&expected, made[page].features, made[first].features);
    }
    assert_true(expected.pages > 5000 && expected.by_slash > 100 && expected.by_several > 100);
    shard(dump, store, NULL);
    struct windrow_store *opened;
    assert_int_equal(windrow_store_open(store, &opened), WINDROW_OK);
    assert_int_equal(windrow_directory_make(scratch), WINDROW_OK);
    assert_int_equal(windrow_variants_find(opened, scratch, 256 << 10, lines, &counts, NULL), WINDROW_OK);
    assert_memory_equal(&counts, &expected, sizeof counts);
    /* Nothing of the sorting is left: an empty directory can be removed as such. */
    assert_int_equal(remove(scratch), 0);
    uint64_t pages = windrow_store_facts(opened)->pages;
    windrow_store_close(opened);

    /* Counting alone goes another way, to the same numbers. */
    assert_int_equal(windrow_suggest_aliases(store, UINT64_C(64) << 20, NULL, &counts, NULL), WINDROW_OK);
    assert_memory_equal(&counts, &expected, sizeof counts);

    struct windrow_buffer in_little = {0}, in_much = {0};
    assert_int_equal(windrow_file_load(lines, 1 << 26, &in_little), WINDROW_OK);
    assert_int_equal(windrow_suggest_aliases(store, UINT64_C(64) << 20, lines, &counts, NULL), WINDROW_OK);
    assert_int_equal(windrow_file_load(lines, 1 << 26, &in_much), WINDROW_OK);
    assert_int_equal(in_little.bytes, in_much.bytes);
    assert_memory_equal(in_little.data, in_much.data, in_much.bytes);

    shard(dump, folded, lines);
    assert_int_equal(windrow_store_open(folded, &opened), WINDROW_OK);
    assert_int_equal(windrow_store_facts(opened)->pages, pages - expected.pages);
    windrow_store_close(opened);
    assert_int_equal(windrow_suggest_aliases(folded, UINT64_C(64) << 20, NULL, &counts, NULL), WINDROW_OK);
    assert_int_equal(counts.pages, 0);
    windrow_buffer_free(&in_little);
    windrow_buffer_free(&in_much);
    free(made);
    free(dump);
    free(store);
    free(lines);
    free(folded);
    free(scratch);
}

static void no_store(void **state)
{
    (void)state;
    char *store = path_of("nothing");
    struct windrow_variant_counts counts;
    assert_int_equal(windrow_suggest_aliases(store, UINT64_C(64) << 20, NULL, &counts, NULL), WINDROW_USAGE);
    assert_false(windrow_file_exists(store));
    free(store);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(what_variants_share), cmocka_unit_test(which_one_stands_for_all), cmocka_unit_test(lines_and_counts),
        cmocka_unit_test(on_disk_as_in_memory), cmocka_unit_test(no_store),
    };
    return cmocka_run_group_tests(tests, directory_make, directory_drop);
}
