/* Dumps to batches: what comes out of all batches together, against a plain model that keeps everything in memory. Aliases, ids
 * and takedowns are folded while batches are written, so what is tested here is above all that it does not matter
 * where one batch ends and the next begins. */
#include "shard/reading.h"

#include "shard/keyrun.h"
#include "shard/linkrun.h"
#include "url/key.h"
#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

enum { PAGES = 60, FILES = 24, IDS = 50, NONE = -1 };

/* A small world: pages with numbers, and all that is said of them. */
struct world {
    int alias[PAGES];         /* page that an alias names for it; NONE */
    int folded[PAGES];        /* what it finally stands for */
    bool dropped[PAGES];
    bool dropped_host[6];
    struct {
        uint64_t id;
        int name;             /* page; FTP; or NAMELESS */
    } ids[IDS];
};

/* Instead of a page. */
enum { NAMELESS = -2, FTP = -3, BROKEN = -4 };

/* What reading should come to. */
struct model {
    uint64_t dropped[WINDROW_DROP_COUNT];
    uint64_t bad_fields;
    uint64_t links;           /* kept, repeated ones each time */
    bool crawled[PAGES], present[PAGES];
    bool linked[PAGES][PAGES];
};

static int host_of(int page)
{
    return page % 6;
}

/* A page's URL in normal form; its host's number counts in host order with the pages. */
static void url_write(int page, char *url)
{
    sprintf(url, "http://h%d.example/p%02d", host_of(page), page);
}

/* A URL in one of several spellings. */
static void url_spell(struct dice *dice, int page, char *url)
{
    switch (dice_below(dice, 4)) {
    case 0: sprintf(url, "HTTP://H%d.example:80/p%02d#f", host_of(page), page); break;
    case 1: sprintf(url, " http://user@h%d.example./x/../p%02d ", host_of(page), page); break;
    default: url_write(page, url);
    }
}

static bool is_dropped(const struct world *world, int page)
{
    return world->dropped[page] || world->dropped_host[host_of(page)];
}

static void world_make(struct dice *dice, struct world *world, bool aliases, bool drop)
{
    memset(world, 0, sizeof *world);
    for (int page = 0; page < PAGES; page++) {
        world->alias[page] = aliases && dice_below(dice, 3) == 0 ? (int)dice_below(dice, PAGES) : NONE;
        if (world->alias[page] == page)
            world->alias[page] = NONE;
        world->dropped[page] = drop && dice_below(dice, 8) == 0;
    }
    if (drop)
        world->dropped_host[dice_below(dice, 6)] = true;
    for (int page = 0; page < PAGES; page++) {
        int end = page, steps = 0;
        while (world->alias[end] != NONE && steps++ < PAGES)
            end = world->alias[end];
        int smallest = end;
        if (world->alias[end] != NONE)
            for (int at = world->alias[end]; at != end; at = world->alias[at])
                /* Host order: by host, then by page. */
                if (host_of(at) < host_of(smallest) || (host_of(at) == host_of(smallest) && at < smallest))
                    smallest = at;
        world->folded[page] = smallest;
    }
    for (int id = 0; id < IDS; id++) {
        world->ids[id].id = id < 4 ? (uint64_t)id : dice_next(dice) >> dice_below(dice, 60);
        uint32_t kind = dice_below(dice, 10);
        world->ids[id].name = kind == 0 ? NAMELESS : kind == 1 ? FTP : (int)dice_below(dice, PAGES);
        for (int other = 0; other < id; other++)
            if (world->ids[other].id == world->ids[id].id)
                world->ids[id].name = world->ids[other].name;
    }
}

/* ---- The model ---- */

static void model_link(const struct world *world, struct model *model, int source, int target)
{
    int from = world->folded[source], to = world->folded[target];
    if (is_dropped(world, from) || is_dropped(world, to)) {
        model->dropped[WINDROW_DROP_TAKEDOWN]++;
    } else if (from == to) {
        model->dropped[WINDROW_DROP_SELF]++;
    } else {
        model->links++;
        model->linked[from][to] = true;
        model->present[to] = true;
    }
}

static void model_source(const struct world *world, struct model *model, int source)
{
    int from = world->folded[source];
    if (!is_dropped(world, from))
        model->crawled[from] = model->present[from] = true;
}

/* A line of URLs: pages, FTP or BROKEN. */
static void model_urls(const struct world *world, struct model *model, int source, const int *targets, int count, bool nofollow)
{
    if (source < 0) {
        model->dropped[source == FTP ? WINDROW_DROP_SCHEME : WINDROW_DROP_MALFORMED] += count ? (uint64_t)count : 1;
        model->bad_fields += source == BROKEN;
        return;
    }
    if (!is_dropped(world, source))
        model_source(world, model, source);
    for (int i = 0; i < count; i++) {
        int target = targets[i];
        model->bad_fields += target == BROKEN;
        if (target < 0)
            model->dropped[target == FTP ? WINDROW_DROP_SCHEME : WINDROW_DROP_MALFORMED]++;
        else if (nofollow)
            model->dropped[WINDROW_DROP_NOFOLLOW]++;
        else if (source == target)
            model->dropped[WINDROW_DROP_SELF]++;
        else if (is_dropped(world, source) || is_dropped(world, target))
            model->dropped[WINDROW_DROP_TAKEDOWN]++;
        else
            model_link(world, model, source, target);
    }
}

static int least(int a, int b)
{
    return a < b ? a : b;
}

/* A line of ids: their names, or BROKEN for what is no number. */
static void model_ids(const struct world *world, struct model *model, int source, const int *targets, int count)
{
    if (source == BROKEN) {
        model->dropped[WINDROW_DROP_MALFORMED] += count ? (uint64_t)count : 1;
        model->bad_fields++;
        return;
    }
    model->bad_fields += source == NAMELESS;
    if (source >= 0 && !is_dropped(world, source))
        model_source(world, model, source);
    for (int i = 0; i < count; i++) {
        int target = targets[i];
        model->bad_fields += target == BROKEN || target == NAMELESS;
        bool malformed = source == NAMELESS || target == NAMELESS || target == BROKEN;
        if (malformed)
            model->dropped[WINDROW_DROP_MALFORMED]++;
        else if (least(source, target) < 0)
            model->dropped[WINDROW_DROP_SCHEME]++;
        else if (is_dropped(world, source) || is_dropped(world, target))
            model->dropped[WINDROW_DROP_TAKEDOWN]++;
        else
            model_link(world, model, source, target);
    }
}

/* ---- Dumps ---- */

static int pick(struct dice *dice)
{
    uint32_t kind = dice_below(dice, 30);
    return kind == 0 ? FTP : kind == 1 ? BROKEN : (int)dice_below(dice, PAGES);
}

static void append(struct windrow_buffer *text, const char *more)
{
    assert_int_equal(windrow_buffer_append(text, more, strlen(more)), WINDROW_OK);
}

static void append_url(struct dice *dice, struct windrow_buffer *text, int page)
{
    char url[128] = "nonsense";
    if (page == FTP)
        strcpy(url, "ftp://h1.example/");
    else if (page >= 0)
        url_spell(dice, page, url);
    append(text, url);
}

static void file_of_urls(struct dice *dice, const struct world *world, struct model *model, bool pairs, struct windrow_buffer *text)
{
    /* The first line shows the shape. */
    const int first[] = {1, 2};
    append(text, "http://h0.example/p00\thttp://h1.example/p01\t");
    append(text, pairs ? "external\n" : "http://h2.example/p02\n");
    model_urls(world, model, 0, first, pairs ? 1 : 2, false);
    for (uint32_t lines = 10 + dice_below(dice, 30), source = 0; lines > 0; lines--) {
        int targets[8], count = (int)dice_below(dice, pairs ? 2 : 8);
        bool nofollow = pairs && dice_below(dice, 5) == 0;
        /* The same source again, sometimes. */
        int from = dice_below(dice, 3) ? pick(dice) : (int)source;
        source = from >= 0 ? (uint32_t)from : source;
        append_url(dice, text, from);
        for (int i = 0; i < count; i++) {
            targets[i] = dice_below(dice, 6) ? pick(dice) : from;
            append(text, "\t");
            append_url(dice, text, targets[i]);
        }
        append(text, count && nofollow ? "\tnofollow\n" : "\n");
        model_urls(world, model, from, targets, count, nofollow);
    }
}

static int append_id(struct dice *dice, const struct world *world, struct windrow_buffer *text, int id)
{
    char number[32] = "99999999999999999999";
    if (dice_below(dice, 30) == 0) {
        append(text, number);
        return BROKEN;
    }
    sprintf(number, "%llu", (unsigned long long)world->ids[id].id);
    append(text, number);
    return world->ids[id].name;
}

static void file_of_ids(struct dice *dice, const struct world *world, struct model *model, struct windrow_buffer *text)
{
    uint32_t id = 0;
    append(text, "\n");
    for (uint32_t lines = 10 + dice_below(dice, 30); lines > 0; lines--) {
        int targets[8], count = (int)dice_below(dice, 8);
        id = dice_below(dice, 3) ? dice_below(dice, IDS) : id;
        int source = append_id(dice, world, text, (int)id);
        for (int i = 0; i < count; i++) {
            append(text, i % 2 ? " " : "\t");
            targets[i] = append_id(dice, world, text, (int)(dice_below(dice, 6) ? dice_below(dice, IDS) : id));
        }
        append(text, "\n");
        model_ids(world, model, source, targets, count);
    }
}

/* ---- What came out ---- */

static int page_of(const uint8_t *key, size_t key_bytes)
{
    char url[128], expected[128];
    int host, page;
    size_t bytes = windrow_key_url((const char *)key, key_bytes, url, sizeof url - 1);
    url[bytes] = 0;
    if (sscanf(url, "http://h%d.example/p%d", &host, &page) != 2 || page < 0 || page >= PAGES)
        fail_msg("a page %s", url);
    url_write(page, expected);
    assert_string_equal(url, expected);
    return page;
}

/* Puts a batch's two runs into the model's form; checks order and out-degrees. */
static void run_collect(const char *scratch, uint64_t run, uint64_t run_pages, struct model *out)
{
    int pages[PAGES];
    uint64_t degrees[PAGES] = {0}, counted[PAGES] = {0}, count = 0;
    struct windrow_keyrun_reader keys;
    struct windrow_linkrun_reader links;
    char *path = windrow_path(scratch, "batch-%06llu.keys", (unsigned long long)run);
    struct windrow_buffer before = {0};
    assert_int_equal(windrow_keyrun_reader_open(&keys, path), WINDROW_OK);
    while (assert_int_equal(windrow_keyrun_next(&keys), WINDROW_OK), !keys.ended) {
        assert_true(count < PAGES);
        assert_true(!count || windrow_keyrun_compare(before.data, before.bytes, keys.key.data, keys.key.bytes) < 0);
        before.bytes = 0;
        windrow_buffer_append(&before, keys.key.data, keys.key.bytes);
        pages[count] = page_of(keys.key.data, keys.key.bytes);
        out->present[pages[count]] = true;
        out->crawled[pages[count]] |= keys.crawled;
        degrees[count++] = keys.degree;
    }
    assert_int_equal(count, run_pages);
    windrow_keyrun_reader_close(&keys);
    free(path);
    path = windrow_path(scratch, "batch-%06llu.links", (unsigned long long)run);
    assert_int_equal(windrow_linkrun_reader_open(&links, path), WINDROW_OK);
    windrow_linkrun_seek(&links, 0, UINT64_MAX);
    while (assert_int_equal(windrow_linkrun_next(&links), WINDROW_OK), !links.ended) {
        for (size_t i = 0; i < links.count; i++) {
            assert_true(links.target < count && links.sources[i] < count);
            out->linked[pages[links.sources[i]]][pages[links.target]] = true;
            counted[links.sources[i]]++;
        }
    }
    assert_memory_equal(counted, degrees, sizeof counted);
    windrow_linkrun_reader_close(&links);
    windrow_buffer_free(&before);
    free(path);
}

/* Reads the dumps with so much memory and so many threads, and compares with the model. Returns the number of batches. */
static uint64_t check(const char *directory, const struct windrow_shard_options *options, uint64_t memory_bytes, unsigned threads,
                      const struct model *expected)
{
    char *scratch = windrow_path(directory, "scratch"), *ledger_path = windrow_path(directory, "ledger"), *log_path = windrow_path(directory, "log");
    struct windrow_fold fold;
    struct windrow_ledger *ledger;
    struct windrow_crew *crew;
    struct windrow_meter meter;
    struct windrow_reading_state state = {0};
    struct model out = {0};
    uint64_t fingerprint;
    assert_int_equal(windrow_directory_make(scratch), WINDROW_OK);
    assert_int_equal(windrow_ledger_open(ledger_path, false, &ledger), WINDROW_OK);
    assert_int_equal(windrow_crew_create(threads, &crew), WINDROW_OK);
    windrow_meter_start(&meter, &options->watch);
    windrow_meter_stage(&meter, "reading", "URLs", 0);
    assert_int_equal(windrow_fold_open(options, scratch, &fold, &fingerprint), WINDROW_OK);
    assert_int_equal(windrow_fold_prepare(&fold, options, ledger, memory_bytes, &meter), WINDROW_OK);
    struct windrow_reading reading = {.options = options, .fold = &fold, .scratch = scratch, .log_path = log_path, .ledger = ledger, .crew = crew,
                                      .meter = &meter, .memory_bytes = memory_bytes + windrow_drop_memory_bytes(fold.drop)};
    if (windrow_reading_run(&reading, &state) != WINDROW_OK)
        fail_msg("%s", windrow_message());
    for (uint64_t run = 0; run < state.run_count; run++) {
        char key[32];
        uint64_t pages;
        sprintf(key, "run/%06llu", (unsigned long long)run);
        assert_int_equal(windrow_ledger_get(ledger, key, &pages, sizeof pages), WINDROW_OK);
        run_collect(scratch, run, pages, &out);
    }
    assert_memory_equal(out.present, expected->present, sizeof out.present);
    assert_memory_equal(out.crawled, expected->crawled, sizeof out.crawled);
    assert_memory_equal(out.linked, expected->linked, sizeof out.linked);
    assert_int_equal(state.links + state.dropped[WINDROW_DROP_DUPLICATE], expected->links);
    for (int drop = 0; drop < WINDROW_DROP_COUNT; drop++)
        if (drop != WINDROW_DROP_DUPLICATE && state.dropped[drop] != expected->dropped[drop])
            fail_msg("%s: %d instead of %d", windrow_drop_names[drop], (int)state.dropped[drop], (int)expected->dropped[drop]);
    assert_int_equal(state.bad_fields, expected->bad_fields);
    assert_int_equal(state.finished, 1);
    windrow_fold_close(&fold);
    windrow_meter_finish(&meter);
    windrow_crew_destroy(crew);
    windrow_ledger_close(ledger);
    assert_int_equal(windrow_directory_remove(scratch), WINDROW_OK);
    assert_int_equal(windrow_directory_remove(ledger_path), WINDROW_OK);
    free(scratch);
    free(ledger_path);
    free(log_path);
    return state.run_count;
}

/* ---- Tests ---- */

static void write_tables(struct dice *dice, const char *directory, const struct world *world, struct windrow_shard_options *options)
{
    struct windrow_buffer aliases = {0}, drop = {0}, names = {0};
    char a[128], line[256];
    for (int page = 0; page < PAGES; page++) {
        if (world->alias[page] != NONE) {
            append_url(dice, &aliases, page);
            append(&aliases, "\t");
            append_url(dice, &aliases, world->alias[page]);
            append(&aliases, "\n");
        }
        url_write(page, a);
        if (world->dropped[page])
            append(&drop, strcat(a, "\n"));
    }
    for (int host = 0; host < 6; host++) {
        sprintf(line, "h%d.example\n", host);
        if (world->dropped_host[host])
            append(&drop, line);
    }
    for (int id = IDS - 1; id >= 0; id--) {
        strcpy(a, "ftp://h1.example/");
        if (world->ids[id].name >= 0)
            url_spell(dice, world->ids[id].name, a);
        sprintf(line, "%llu\t%s\n", (unsigned long long)world->ids[id].id, a);
        if (world->ids[id].name != NAMELESS)
            append(&names, line);
    }
    static const char *const names_of[] = {"aliases", "drop", "names"};
    const char **fields[] = {&options->aliases, &options->drop, &options->names};
    struct windrow_buffer *texts[] = {&aliases, &drop, &names};
    for (int i = 0; i < 3; i++) {
        char *path = scratch_path(directory, names_of[i]);
        scratch_write(path, texts[i]->data, texts[i]->bytes);
        *fields[i] = texts[i]->bytes ? path : NULL;
        if (!*fields[i])
            free(path);
        windrow_buffer_free(texts[i]);
    }
}

static void check_world(uint64_t seed, bool aliases, bool drop, bool with_ids)
{
    struct dice dice = {seed};
    struct world world;
    struct model *model = memory_array(1, sizeof *model);
    char *directory = scratch_make(), *paths[FILES];
    struct windrow_shard_options options;
    windrow_shard_defaults(&options);
    options.bad_max = 1;
    world_make(&dice, &world, aliases, drop);
    write_tables(&dice, directory, &world, &options);
    for (int file = 0; file < FILES; file++) {
        struct windrow_buffer text = {0};
        char name[32];
        sprintf(name, "dump-%02d", file);
        if (with_ids && file % 3 == 0)
            file_of_ids(&dice, &world, model, &text);
        else
            file_of_urls(&dice, &world, model, file % 2, &text);
        paths[file] = scratch_path(directory, name);
        scratch_write(paths[file], text.data, text.bytes);
        windrow_buffer_free(&text);
    }
    options.dumps = (const char *const *)paths;
    options.dump_count = FILES;
    /* So small that every file is a batch; middling; everything in one. */
    assert_true(check(directory, &options, 9000, 1, model) > FILES / 3);
    check(directory, &options, 24000, 2, model);
    check(directory, &options, 40000, 3, model);
    assert_int_equal(check(directory, &options, 8 << 20, 1, model), 1);
    for (int file = 0; file < FILES; file++)
        free(paths[file]);
    free((char *)options.aliases);
    free((char *)options.drop);
    free((char *)options.names);
    free(model);
    scratch_remove(directory);
}

static void batches_hold_what_the_dumps_say(void **state)
{
    (void)state;
    for (uint64_t seed = 0; seed < 2; seed++)
        check_world(seed, false, false, false);
}

static void aliases_are_folded(void **state)
{
    (void)state;
    for (uint64_t seed = 10; seed < 14; seed++)
        check_world(seed, true, false, false);
}

static void takedowns_leave_no_trace(void **state)
{
    (void)state;
    for (uint64_t seed = 20; seed < 23; seed++)
        check_world(seed, false, true, false);
}

static void ids_are_their_names(void **state)
{
    (void)state;
    for (uint64_t seed = 30; seed < 33; seed++)
        check_world(seed, false, false, true);
}

static void all_of_it_goes_together(void **state)
{
    (void)state;
    for (uint64_t seed = 40; seed < 46; seed++)
        check_world(seed, true, true, true);
}

static int no_sync(int descriptor)
{
    return descriptor < 0 ? -1 : 0;
}

int main(void)
{
    /* Hundreds of small files, none of which has to outlive the power. */
    windrow_files.sync_data = windrow_files.sync = no_sync;
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(batches_hold_what_the_dumps_say),
        cmocka_unit_test(aliases_are_folded),
        cmocka_unit_test(takedowns_leave_no_trace),
        cmocka_unit_test(ids_are_their_names),
        cmocka_unit_test(all_of_it_goes_together),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
