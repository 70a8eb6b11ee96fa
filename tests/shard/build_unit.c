/* The whole way from dumps to a store, against a plain model that keeps all pages and links in memory and knows nothing of
 * the library: what stands in the store, and that it is the same store however it was made. */
#include "windrow.h"

#include "base/crew.h"
#include "shard/job.h"
#include "shard/reading.h"
#include "store/inlinks.h"
#include "store/layout.h"
#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <errno.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

enum { PAGES = 180, FILES_MOST = 12, ROUNDS = 12 };

/* ---- The model ---- */

static const char *const hosts[] = {"example", "a.example", "b.a.example", "a-b.example", "ab.example", "www.a.example", "10.0.0.1", "x.test"};
static const char *const domains[] = {"example", "a.example", "a.example", "a-b.example", "ab.example", "a.example", "10.0.0.1", "x.test"};
static const char *const paths[] = {"/", "/a", "/a/", "/a?q", "/ab", "/%C3%A9", "/~x", "/a/b.html", "//", "/?"};
enum { HOSTS = sizeof hosts / sizeof *hosts, PATHS = sizeof paths / sizeof *paths };

struct page {
    unsigned host, path, port; /* port 0: none */
    bool https;
};

struct model {
    struct page pages[PAGES]; /* distinct */
    bool present[PAGES], crawled[PAGES], linked[PAGES][PAGES];
    uint64_t dropped[WINDROW_DROP_COUNT];
    unsigned order[PAGES];    /* pages that are there, in host order */
    unsigned count;
};

/* Labels from the last to the first; fewer labels go first, labels bytewise. */
static int host_order(const char *a, const char *b)
{
    size_t a_end = strlen(a), b_end = strlen(b);
    for (;;) {
        size_t a_at = a_end, b_at = b_end;
        while (a_at && a[a_at - 1] != '.')
            a_at--;
        while (b_at && b[b_at - 1] != '.')
            b_at--;
        size_t a_bytes = a_end - a_at, b_bytes = b_end - b_at;
        int order = memcmp(a + a_at, b + b_at, a_bytes < b_bytes ? a_bytes : b_bytes);
        if (order || a_bytes != b_bytes)
            return order ? order : a_bytes < b_bytes ? -1 : 1;
        if (!a_at || !b_at)
            return (a_at > 0) - (b_at > 0);
        a_end = a_at - 1;
        b_end = b_at - 1;
    }
}

static int page_order(const void *left, const void *right)
{
    const struct page *a = left, *b = right;
    int order = a->host == b->host ? 0 : host_order(hosts[a->host], hosts[b->host]);
    if (order)
        return order;
    if (a->https != b->https)
        return a->https ? 1 : -1;
    if (a->port != b->port)
        return a->port < b->port ? -1 : 1;
    return strcmp(paths[a->path], paths[b->path]);
}

static void page_url(const struct page *page, char *url)
{
    char port[16] = "";
    if (page->port)
        sprintf(port, ":%u", page->port);
    sprintf(url, "http%s://%s%s%s", page->https ? "s" : "", hosts[page->host], port, paths[page->path]);
}

static void pages_make(struct dice *dice, struct model *model)
{
    static const unsigned ports[] = {0, 0, 0, 8, 81, 65535};
    for (unsigned count = 0; count < PAGES;) {
        struct page page = {dice_below(dice, HOSTS), dice_below(dice, PATHS), ports[dice_below(dice, 6)], dice_below(dice, 2)};
        bool again = false;
        for (unsigned other = 0; other < count; other++)
            again |= page_order(&page, &model->pages[other]) == 0;
        if (!again)
            model->pages[count++] = page;
    }
    qsort(model->pages, PAGES, sizeof *model->pages, page_order);
}

/* ---- Dumps ---- */

struct dumps {
    char *directory;
    char *files[FILES_MOST];
    size_t count;
    enum windrow_shape shape;
};

/* The URL in one of its spellings. */
static void put_url(FILE *file, struct dice *dice, const struct page *page)
{
    char url[200];
    page_url(page, url);
    unsigned kind = dice_below(dice, 12);
    if (kind == 0)
        for (char *at = url; *at && at < url + 12; at++)
            *at = (char)(*at >= 'a' && *at <= 'z' ? *at - 32 : *at);
    if (kind == 0 && strchr(url + 8, '/') && strchr(url + 8, '/') < url + 12)
        page_url(page, url); /* capitals would reach the path */
    fprintf(file, "%s%s%s", kind == 1 ? "  " : "", url, kind == 2 ? "#part" : "");
}

enum { GOOD, MALFORMED, SCHEME, KINDS };

/* Writes a field; a good one is page `page`. */
static int put_field(FILE *file, struct dice *dice, const struct page *page)
{
    static const char *const malformed[] = {"http:/one.example/", "http://a b.example/", "no url", "http://x..example/", "https://a.example:70000/"};
    static const char *const schemes[] = {"mailto:a@b.example", "ftp://a.example/", "javascript:void(0)"};
    unsigned kind = dice_below(dice, 40);
    if (kind == 0)
        fputs(malformed[dice_below(dice, 5)], file);
    else if (kind == 1)
        fputs(schemes[dice_below(dice, 3)], file);
    else
        put_url(file, dice, page);
    return kind < 2 ? (int)kind + 1 : GOOD;
}

static void take_link(struct model *model, int source_kind, unsigned source, int target_kind, unsigned target, bool nofollow)
{
    static const enum windrow_drop drops[] = {[MALFORMED] = WINDROW_DROP_MALFORMED, [SCHEME] = WINDROW_DROP_SCHEME};
    if (source_kind != GOOD)
        model->dropped[drops[source_kind]]++;
    else if (target_kind != GOOD)
        model->dropped[drops[target_kind]]++;
    else if (nofollow)
        model->dropped[WINDROW_DROP_NOFOLLOW]++;
    else if (source == target)
        model->dropped[WINDROW_DROP_SELF]++;
    else if (model->linked[source][target])
        model->dropped[WINDROW_DROP_DUPLICATE]++;
    else
        model->linked[source][target] = model->present[target] = true;
}

/* Pages near each other are more likely, so that there are repeated links, and runs of sources. */
static unsigned pick(struct dice *dice)
{
    return dice_below(dice, 3) ? dice_below(dice, PAGES / 4) : dice_below(dice, PAGES);
}

static void write_line(FILE *file, struct dice *dice, struct model *model, enum windrow_shape shape)
{
    unsigned source = pick(dice), count = shape == WINDROW_SHAPE_PAIRS ? dice_below(dice, 8) > 0 : dice_below(dice, 30);
    if (dice_below(dice, 30) == 0) {
        fputs("\n", file); /* blank lines say nothing */
        return;
    }
    int source_kind = put_field(file, dice, &model->pages[source]);
    if (source_kind == GOOD)
        model->present[source] = model->crawled[source] = true;
    for (unsigned index = 0; index < count; index++) {
        unsigned target = pick(dice);
        fputc('\t', file);
        int target_kind = put_field(file, dice, &model->pages[target]);
        bool nofollow = shape == WINDROW_SHAPE_PAIRS && dice_below(dice, 6) == 0;
        if (nofollow)
            fputs(dice_below(dice, 2) ? "\tnofollow" : "\texternal, UGC", file);
        else if (shape == WINDROW_SHAPE_PAIRS && dice_below(dice, 6) == 0)
            fputs("\tnoopener", file);
        take_link(model, source_kind, source, target_kind, target, nofollow);
    }
    if (!count && source_kind != GOOD) /* the line itself is what is dropped */
        model->dropped[source_kind == MALFORMED ? WINDROW_DROP_MALFORMED : WINDROW_DROP_SCHEME]++;
    fputs(dice_below(dice, 9) ? "\n" : "\r\n", file);
}

static void dumps_make(struct dice *dice, struct model *model, struct dumps *dumps)
{
    dumps->directory = scratch_make();
    dumps->shape = dice_below(dice, 2) ? WINDROW_SHAPE_PAIRS : WINDROW_SHAPE_LISTS;
    dumps->count = 1 + dice_below(dice, FILES_MOST);
    pages_make(dice, model);
    for (size_t index = 0; index < dumps->count; index++) {
        char name[40];
        sprintf(name, "dump-%zu", index);
        dumps->files[index] = scratch_path(dumps->directory, name);
        FILE *file = fopen(dumps->files[index], "w");
        assert_non_null(file);
        for (uint32_t lines = dice_below(dice, 60); lines; lines--)
            write_line(file, dice, model, dumps->shape);
        fclose(file);
    }
    for (unsigned page = 0; page < PAGES; page++)
        if (model->present[page])
            model->order[model->count++] = page;
}

static void dumps_free(struct dumps *dumps)
{
    for (size_t index = 0; index < dumps->count; index++)
        free(dumps->files[index]);
    scratch_remove(dumps->directory);
}

static struct windrow_shard_options options_for(const struct dumps *dumps, const char *out)
{
    struct windrow_shard_options options;
    windrow_shard_defaults(&options);
    options.out = out;
    options.dumps = (const char *const *)dumps->files;
    options.dump_count = dumps->count;
    options.shape = dumps->shape;
    options.memory_bytes = UINT64_C(64) << 20;
    options.threads = 1;
    options.bad_max = 1;
    return options;
}

/* ---- Checks ---- */

static void shout(void *context, const char *damage)
{
    (void)context;
    print_error("%s\n", damage);
}

static void check_clean(const char *store, unsigned threads)
{
    enum windrow_status status = windrow_store_verify(store, threads, shout, NULL, NULL);
    if (status)
        fail_msg("%s: verification ends with %d: %s", store, (int)status, windrow_message());
}

static uint64_t fingerprint_of(const char *path)
{
    struct windrow_store *store;
    assert_int_equal(windrow_store_open(path, &store), WINDROW_OK);
    uint64_t fingerprint = windrow_store_facts(store)->fingerprint;
    windrow_store_close(store);
    return fingerprint;
}

static bool core_page(const struct model *model, unsigned page)
{
    for (unsigned target = 0; target < PAGES; target++)
        if (model->linked[page][target])
            return true;
    return false;
}

static void check_pages(const struct windrow_store *store, const struct model *model)
{
    struct windrow_page_reader *reader;
    assert_int_equal(windrow_page_reader_create(store, &reader), WINDROW_OK);
    uint64_t cores = 0, crawled = 0;
    for (unsigned id = 0; id < model->count; id++) {
        unsigned page = model->order[id];
        char expected[200];
        const char *url;
        size_t url_bytes;
        uint64_t found, number;
        bool folded;
        page_url(&model->pages[page], expected);
        assert_int_equal(windrow_page_reader_url(reader, id, &url, &url_bytes), WINDROW_OK);
        assert_string_equal(url, expected);
        assert_int_equal(url_bytes, strlen(expected));
        assert_int_equal(windrow_page_reader_find(reader, expected, strlen(expected), &found, &folded), WINDROW_OK);
        assert_int_equal(found, id);
        assert_false(folded);
        if (windrow_store_page_crawled(store, id) != model->crawled[page])
            fail_msg("page %u, %s, is %sa crawled one", id, expected, model->crawled[page] ? "not " : "");
        crawled += model->crawled[page];
        bool core = windrow_store_page_number(store, id, &number);
        assert_int_equal(core, core_page(model, page));
        assert_int_equal(number, core ? cores : id - cores);
        if (core)
            assert_int_equal(windrow_store_core_page(store, cores++), id);
    }
    for (unsigned page = 0; page < PAGES; page++) {
        char url[200];
        uint64_t found;
        bool folded;
        page_url(&model->pages[page], url);
        if (!model->present[page])
            assert_int_equal(windrow_page_reader_find(reader, url, strlen(url), &found, &folded), WINDROW_NO);
    }
    windrow_page_reader_destroy(reader);
    const struct windrow_store_facts *facts = windrow_store_facts(store);
    assert_int_equal(facts->pages, model->count);
    assert_int_equal(facts->core_pages, cores);
    assert_int_equal(facts->dangling_pages, model->count - cores);
    assert_int_equal(facts->crawled_pages, crawled);
}

static void check_hosts(const struct windrow_store *store, const struct model *model)
{
    uint64_t host_count = 0, cores = 0;
    for (unsigned id = 0; id < model->count; id++) {
        unsigned host = model->pages[model->order[id]].host;
        if (!id || model->pages[model->order[id - 1]].host != host) {
            struct windrow_host found = windrow_store_host(store, host_count++);
            assert_int_equal(found.first_page, id);
            assert_int_equal(found.first_core, cores);
            assert_int_equal(found.name_bytes, strlen(hosts[host]));
            assert_memory_equal(found.name, hosts[host], found.name_bytes);
            assert_int_equal(found.domain_bytes, strlen(domains[host]));
        }
        assert_int_equal(windrow_store_host_of_page(store, id), host_count - 1);
        cores += core_page(model, model->order[id]);
    }
    assert_int_equal(windrow_store_facts(store)->hosts, host_count);
    struct windrow_host end = windrow_store_host(store, host_count);
    assert_int_equal(end.first_page, model->count);
    assert_int_equal(end.first_core, cores);
    assert_null(end.name);
}

static void check_degrees(const struct windrow_store *store, const struct model *model)
{
    uint64_t core = 0;
    for (unsigned id = 0; id < model->count; id++) {
        unsigned page = model->order[id], degree = 0, inside = 0;
        for (unsigned target = 0; target < PAGES; target++) {
            degree += model->linked[page][target];
            inside += model->linked[page][target] && model->pages[target].host == model->pages[page].host && core_page(model, target);
        }
        if (!degree)
            continue;
        assert_int_equal(windrow_store_degrees(store)[core], degree);
        assert_int_equal(windrow_store_inside_degrees(store)[core], inside);
        core++;
    }
}

static void check_links(const struct windrow_store *store, const struct model *model)
{
    uint64_t links[WINDROW_BLOCK_KINDS] = {0};
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++) {
        struct windrow_block_reader reader = {0};
        struct windrow_lists lists = {0};
        unsigned id = 0;
        for (uint64_t number = 0; number < windrow_store_block_count(store, kind); number++) {
            const struct windrow_block_record *record = windrow_store_block_record(store, kind, number);
            struct windrow_block block;
            assert_int_equal(windrow_store_block_read(store, kind, number, &reader, &block), WINDROW_OK);
            assert_int_equal(windrow_block_lists(&block, record, windrow_store_facts(store)->core_pages, &lists), WINDROW_OK);
            const uint64_t *sources = (const uint64_t *)lists.sources.data;
            for (uint32_t target = 0; target < record->target_count; target++, id++) {
                while (core_page(model, model->order[id]) != (kind == WINDROW_BLOCK_CORE))
                    id++;
                uint32_t count = ((const uint32_t *)lists.counts.data)[target], expected = 0;
                for (unsigned source = 0; source < model->count; source++)
                    if (model->linked[model->order[source]][model->order[id]]) {
                        assert_true(expected < count);
                        assert_int_equal(windrow_store_core_page(store, sources[expected++]), source);
                    }
                assert_int_equal(count, expected);
                sources += count;
                links[kind] += count;
            }
        }
        while (id < model->count)
            assert_int_not_equal(core_page(model, model->order[id++]), kind == WINDROW_BLOCK_CORE);
        windrow_block_reader_free(&reader);
        windrow_lists_free(&lists);
    }
    assert_int_equal(windrow_store_facts(store)->links, links[WINDROW_BLOCK_CORE] + links[WINDROW_BLOCK_RIM]);
    assert_int_equal(windrow_store_facts(store)->core_links, links[WINDROW_BLOCK_CORE]);
}

static void check_dropped(const char *path, const struct model *model)
{
    struct windrow_job_status job;
    assert_int_equal(windrow_job_status(path, &job), WINDROW_OK);
    assert_int_equal(job.stage, WINDROW_JOB_FINISHED);
    for (int drop = 0; drop < WINDROW_DROP_COUNT; drop++)
        if (job.dropped[drop] != model->dropped[drop])
            fail_msg("%s: %d dropped as %s, not %d", path, (int)job.dropped[drop], windrow_drop_names[drop], (int)model->dropped[drop]);
}

static void check_store(const char *path, const struct model *model)
{
    struct windrow_store *store;
    assert_int_equal(windrow_store_open(path, &store), WINDROW_OK);
    check_pages(store, model);
    check_hosts(store, model);
    check_degrees(store, model);
    check_links(store, model);
    windrow_store_close(store);
    check_dropped(path, model);
    check_clean(path, 2);
}

/* ---- Ways to make a store ---- */

static void must_shard(const struct windrow_shard_options *options)
{
    bool already_done;
    enum windrow_status status = windrow_shard(options, &already_done);
    if (status)
        fail_msg("shard ends with %d: %s", (int)status, windrow_message());
    assert_false(already_done);
}

/* Reads the dumps with so little memory that every file becomes a batch, or several; then goes on as the job does. */
static void shard_in_many_runs(struct windrow_shard_options options)
{
    char *ledger_path = scratch_path(options.out, "ledger"), *scratch = scratch_path(options.out, "ledger/scratch");
    char *log = scratch_path(options.out, "ledger/malformed.tsv");
    struct windrow_ledger *ledger;
    struct windrow_crew *crew;
    struct windrow_meter meter;
    struct windrow_fold fold = {0};
    struct windrow_reading_state state = {0};
    assert_int_equal(windrow_directory_make(options.out), WINDROW_OK);
    assert_int_equal(windrow_ledger_open(ledger_path, false, &ledger), WINDROW_OK);
    assert_int_equal(windrow_directory_make(scratch), WINDROW_OK);
    assert_int_equal(windrow_crew_create(options.threads, &crew), WINDROW_OK);
    windrow_meter_start(&meter, &options.watch);
    struct windrow_reading reading = {.options = &options, .fold = &fold, .scratch = scratch, .log_path = log, .ledger = ledger, .crew = crew,
                                      .meter = &meter, .memory_bytes = 4096};
    assert_int_equal(windrow_reading_run(&reading, &state), WINDROW_OK);
    windrow_meter_finish(&meter);
    windrow_crew_destroy(crew);
    windrow_ledger_close(ledger);
    free(ledger_path);
    free(scratch);
    free(log);
    must_shard(&options);
}

struct stopper {
    atomic_bool stop;
    unsigned calls_left;
};

static void stop_soon(void *context, const struct windrow_progress *progress)
{
    (void)progress;
    struct stopper *stopper = context;
    if (stopper->calls_left-- == 0)
        atomic_store(&stopper->stop, true);
}

/* Stops the job at ever new moments until it is through; it is gone on with by another number of threads. */
static unsigned shard_in_steps(struct windrow_shard_options options, struct dice *dice)
{
    for (unsigned stops = 0;; stops++) {
        struct stopper stopper = {.calls_left = dice_below(dice, 3 + stops)};
        options.threads = 1 + dice_below(dice, 3);
        options.memory_bytes = (UINT64_C(64) + dice_below(dice, 100)) << 20;
        options.watch = (struct windrow_watch){.listener = stop_soon, .context = &stopper, .stop = &stopper.stop};
        enum windrow_status status = windrow_shard(&options, NULL);
        if (status == WINDROW_OK)
            return stops;
        if (status != WINDROW_STOPPED || stops == 200)
            fail_msg("shard ends with %d after %u stops: %s", (int)status, stops, windrow_message());
    }
}

static void test_random_dumps(void **state)
{
    (void)state;
    struct dice dice = {2024};
    unsigned stops = 0;
    for (int round = 0; round < ROUNDS; round++) {
        struct model *model = memory_array(1, sizeof *model);
        struct dumps dumps = {0};
        dumps_make(&dice, model, &dumps);
        char *store = scratch_path(dumps.directory, "store"), *other = scratch_path(dumps.directory, "other");
        struct windrow_shard_options options = options_for(&dumps, store);
        must_shard(&options);
        check_store(store, model);
        uint64_t fingerprint = fingerprint_of(store);

        bool already_done = false;
        assert_int_equal(windrow_shard(&options, &already_done), WINDROW_OK);
        assert_true(already_done);

        options.out = other;
        options.threads = 2 + (unsigned)round % 2;
        must_shard(&options);
        assert_int_equal(fingerprint_of(other), fingerprint);
        windrow_directory_remove(other);

        options.threads = 1 + (unsigned)round % 3;
        shard_in_many_runs(options);
        assert_int_equal(fingerprint_of(other), fingerprint);
        check_store(other, model);
        windrow_directory_remove(other);

        stops += shard_in_steps(options, &dice);
        assert_int_equal(fingerprint_of(other), fingerprint);
        check_clean(other, 1);
        scratch_remove(other);
        free(store);
        dumps_free(&dumps);
        free(model);
    }
    assert_true(stops > ROUNDS / 2);
}

/* ---- A system that fails ---- */

/* No test here pulls the plug, and a sync is what they would wait for most. */
static int no_sync(int descriptor)
{
    (void)descriptor;
    return 0;
}

static struct windrow_file_functions honest;
static int64_t calls_left; /* until one fails */

static bool fails(void)
{
    if (calls_left-- != 0)
        return false;
    errno = ENOSPC;
    return true;
}

static int open_or_fail(const char *path, int flags, mode_t mode) { return fails() ? -1 : honest.open(path, flags, mode); }
static ssize_t write_or_fail(int descriptor, const void *bytes, size_t count) { return fails() ? -1 : honest.write(descriptor, bytes, count); }
static int sync_or_fail(int descriptor) { (void)descriptor; return fails() ? -1 : 0; }
static int rename_or_fail(const char *from, const char *to) { return fails() ? -1 : honest.rename(from, to); }
static ssize_t read_at_or_fail(int descriptor, void *bytes, size_t count, off_t offset) { return fails() ? -1 : honest.read_at(descriptor, bytes, count, offset); }

static enum windrow_status shard_failing(const struct windrow_shard_options *options, int64_t call)
{
    honest = windrow_files;
    windrow_files.open = open_or_fail;
    windrow_files.write = write_or_fail;
    windrow_files.sync = windrow_files.sync_data = sync_or_fail;
    windrow_files.rename = rename_or_fail;
    windrow_files.read_at = read_at_or_fail;
    calls_left = call;
    enum windrow_status status = windrow_shard(options, NULL);
    windrow_files = honest;
    return status;
}

/* Whichever call finds the disk full, the job says so and, run again, comes to the same store. */
static void test_full_disk(void **state)
{
    (void)state;
    enum { TRIES = 60 };
    struct dice dice = {77};
    struct model *model = memory_array(1, sizeof *model);
    struct dumps dumps = {0};
    dumps_make(&dice, model, &dumps);
    char *store = scratch_path(dumps.directory, "store"), *other = scratch_path(dumps.directory, "other");
    struct windrow_shard_options options = options_for(&dumps, store);
    int64_t all = INT64_MAX;
    assert_int_equal(shard_failing(&options, all), WINDROW_OK);
    all -= calls_left;
    assert_true(all > 30);
    options.out = other;
    for (int64_t number = 0; number < TRIES; number++) {
        int64_t call = all * number / TRIES;
        enum windrow_status status = shard_failing(&options, call);
        if (status != WINDROW_RESOURCE)
            fail_msg("call %d of %d fails, and shard ends with %d: %s", (int)call, (int)all, (int)status, status ? windrow_message() : "");
        assert_non_null(strstr(windrow_message(), strerror(ENOSPC)));
        must_shard(&options);
        assert_int_equal(fingerprint_of(store), fingerprint_of(other));
        assert_int_equal(windrow_directory_remove(other), WINDROW_OK);
    }
    free(store);
    free(other);
    dumps_free(&dumps);
    free(model);
}

/* ---- Particular dumps ---- */

/* Shards one file with the text and gives the store's path, in a scratch directory that the caller removes. */
static char *shard_text(const char *directory, const char *text)
{
    char *dump = scratch_path(directory, "dump"), *store = scratch_path(directory, "store");
    scratch_write_text(dump, text);
    struct dumps dumps = {.files = {dump}, .count = 1, .shape = WINDROW_SHAPE_LISTS};
    struct windrow_shard_options options = options_for(&dumps, store);
    must_shard(&options);
    free(dump);
    return store;
}

static void check_empty(const char *text, uint64_t malformed)
{
    char *directory = scratch_make(), *path = shard_text(directory, text);
    struct windrow_store *store;
    struct windrow_job_status job;
    struct windrow_page_reader *reader;
    uint64_t page;
    bool folded;
    assert_int_equal(windrow_store_open(path, &store), WINDROW_OK);
    assert_int_equal(windrow_store_facts(store)->pages, 0);
    assert_int_equal(windrow_store_facts(store)->hosts, 0);
    assert_int_equal(windrow_store_facts(store)->links, 0);
    assert_int_equal(windrow_page_reader_create(store, &reader), WINDROW_OK);
    assert_int_equal(windrow_page_reader_find(reader, "http://a.example/", 17, &page, &folded), WINDROW_NO);
    windrow_page_reader_destroy(reader);
    windrow_store_close(store);
    assert_int_equal(windrow_job_status(path, &job), WINDROW_OK);
    assert_int_equal(job.dropped[WINDROW_DROP_MALFORMED], malformed);
    check_clean(path, 2);
    free(path);
    scratch_remove(directory);
}

static void test_empty_dump(void **state)
{
    (void)state;
    check_empty("", 0);
    check_empty("\n \n\t\n", 0);
}

static void test_malformed_lines_only(void **state)
{
    (void)state;
    check_empty("x\nhttp:/y\thttp://a.example/\thttp://b.example/\n", 3);
}

static void test_page_alone(void **state)
{
    (void)state;
    char *directory = scratch_make(), *path = shard_text(directory, "http://a.example/\n");
    struct windrow_store *store;
    assert_int_equal(windrow_store_open(path, &store), WINDROW_OK);
    assert_int_equal(windrow_store_facts(store)->pages, 1);
    assert_int_equal(windrow_store_facts(store)->crawled_pages, 1);
    assert_int_equal(windrow_store_facts(store)->core_pages, 0);
    windrow_store_close(store);
    check_clean(path, 1);
    free(path);
    scratch_remove(directory);
}

/* Two pages that everybody links to: their lists are cut into pieces, one among core pages, one on the rim. The second file repeats
 * some links, so that pieces are made of several batches. */
static void test_star(void **state)
{
    (void)state;
    enum { SOURCES = 420000 };
    char *directory = scratch_make(), *store_path = scratch_path(directory, "store");
    struct dumps dumps = {.directory = directory, .count = 2, .shape = WINDROW_SHAPE_LISTS};
    dumps.files[0] = scratch_path(directory, "dump-0");
    dumps.files[1] = scratch_path(directory, "dump-1");
    FILE *file = fopen(dumps.files[0], "w");
    assert_non_null(file);
    fputs("http://core.example/\thttp://rim.example/\n", file);
    for (unsigned source = 0; source < SOURCES; source++)
        fprintf(file, "http://s.example/%06u\thttp://core.example/\thttp://rim.example/\n", source);
    fclose(file);
    file = fopen(dumps.files[1], "w");
    assert_non_null(file);
    for (unsigned source = 0; source < SOURCES; source += 3)
        fprintf(file, "http://s.example/%06u\thttp://core.example/\n", source);
    fclose(file);
    struct windrow_shard_options options = options_for(&dumps, store_path);
    options.threads = 2;
    must_shard(&options);
    check_clean(store_path, 2);
    struct windrow_job_status job;
    assert_int_equal(windrow_job_status(store_path, &job), WINDROW_OK);
    assert_int_equal(job.dropped[WINDROW_DROP_DUPLICATE], SOURCES / 3);
    struct windrow_store *store;
    assert_int_equal(windrow_store_open(store_path, &store), WINDROW_OK);
    assert_int_equal(windrow_store_facts(store)->links, 2 * SOURCES + 1);
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++) {
        struct windrow_inlinks inlinks;
        uint64_t pieces = 0, next = kind == WINDROW_BLOCK_CORE; /* the core page itself links to the rim */
        for (uint64_t block = 0; block < windrow_store_block_count(store, kind); block++)
            pieces += windrow_store_block_record(store, kind, block)->flags & WINDROW_BLOCK_PIECE ? 1 : 0;
        assert_int_equal(pieces, 4);
        windrow_inlinks_begin(&inlinks, store, kind, 0);
        do {
            assert_int_equal(windrow_inlinks_next(&inlinks), WINDROW_OK);
            assert_false(inlinks.ended);
            assert_int_equal(inlinks.target, 0);
            for (uint64_t index = 0; index < inlinks.count; index++)
                assert_int_equal(inlinks.sources[index], next++);
        } while (inlinks.more);
        assert_int_equal(next, SOURCES + 1);
        uint64_t others = 0;
        while (!windrow_inlinks_next(&inlinks) && !inlinks.ended) {
            assert_int_equal(inlinks.count, 0);
            others++;
        }
        assert_true(inlinks.ended);
        assert_int_equal(others, kind == WINDROW_BLOCK_CORE ? SOURCES : 0);
        windrow_inlinks_end(&inlinks);
    }
    windrow_store_close(store);
    free(store_path);
    dumps_free(&dumps);
}

/* More pages than a segment holds; a host whose core pages lie on both sides of the border and link to each other. */
static void test_segments(void **state)
{
    (void)state;
    enum { CORES = 1000, FRONTIER = (1 << 20) - 500, APART = 499 };
    char *directory = scratch_make(), *store_path = scratch_path(directory, "store"), *other = scratch_path(directory, "other");
    struct dumps dumps = {.directory = directory, .count = 1, .shape = WINDROW_SHAPE_LISTS};
    dumps.files[0] = scratch_path(directory, "dump");
    FILE *file = fopen(dumps.files[0], "w");
    assert_non_null(file);
    for (unsigned core = 0; core < CORES; core++) {
        fprintf(file, "http://b.example/%04u\thttp://b.example/%04u", core, (core + APART) % CORES);
        for (unsigned page = core; page < FRONTIER; page += CORES)
            fprintf(file, "\thttp://a.example/%07u", page);
        fputs("\n", file);
    }
    fclose(file);
    struct windrow_shard_options options = options_for(&dumps, store_path);
    must_shard(&options);
    options.out = other;
    options.threads = 2;
    must_shard(&options);
    assert_int_equal(fingerprint_of(store_path), fingerprint_of(other));
    check_clean(store_path, 2);
    struct windrow_store *store;
    assert_int_equal(windrow_store_open(store_path, &store), WINDROW_OK);
    assert_int_equal(windrow_store_facts(store)->pages, FRONTIER + CORES);
    assert_int_equal(windrow_store_host(store, 1).first_page, FRONTIER);
    uint64_t number;
    assert_true(windrow_store_page_number(store, FRONTIER + 500, &number));
    assert_int_equal(number, 500);
    struct windrow_inlinks inlinks;
    windrow_inlinks_begin(&inlinks, store, WINDROW_BLOCK_CORE, 0);
    for (unsigned core = 0; core < CORES; core++) {
        assert_int_equal(windrow_inlinks_next(&inlinks), WINDROW_OK);
        assert_int_equal(inlinks.target, core);
        assert_int_equal(inlinks.count, 1);
        assert_int_equal(inlinks.sources[0], (core + CORES - APART) % CORES);
        assert_int_equal(windrow_store_inside_degrees(store)[core], 1);
        assert_int_equal(windrow_store_degrees(store)[core], 1 + (FRONTIER - core + CORES - 1) / CORES);
    }
    windrow_inlinks_end(&inlinks);
    windrow_inlinks_begin(&inlinks, store, WINDROW_BLOCK_RIM, 0);
    for (unsigned page = 0; page < FRONTIER; page++) {
        assert_int_equal(windrow_inlinks_next(&inlinks), WINDROW_OK);
        assert_int_equal(inlinks.target, page);
        assert_int_equal(inlinks.count, 1);
        assert_int_equal(inlinks.sources[0], page % CORES);
    }
    windrow_inlinks_end(&inlinks);
    windrow_store_close(store);
    free(store_path);
    free(other);
    dumps_free(&dumps);
}

int main(void)
{
    windrow_files.sync = windrow_files.sync_data = no_sync;
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_page_alone),
        cmocka_unit_test(test_malformed_lines_only),
        cmocka_unit_test(test_random_dumps),
        cmocka_unit_test(test_full_disk),
        cmocka_unit_test(test_star),
        cmocka_unit_test(test_segments),
        cmocka_unit_test(test_empty_dump),
    };
    return cmocka_run_group_tests_name("shard", tests, NULL, NULL);
}
