/* Dumps as chunks: whatever the size of chunks and wherever a reader stops and another goes on, the same
 * sources and targets come out. */
#include "dump/reader.h"

#include "base/file.h"

#include <errno.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>
#include <unistd.h>

static char directory[] = "/tmp/windrow-reader-XXXXXX";
static char paths[3][64];
static const char *const names[] = {paths[0], paths[1], paths[2]};

static int directory_make(void **state)
{
    (void)state;
    if (mkdtemp(directory) == NULL)
        return -1;
    for (int i = 0; i < 3; i++)
        snprintf(paths[i], sizeof paths[i], "%s/dump-%d", directory, i);
    return 0;
}

static int directory_drop(void **state)
{
    (void)state;
    return windrow_directory_remove(directory) == WINDROW_OK ? 0 : -1;
}

static void file_write(int file, const char *text, size_t bytes)
{
    FILE *out = fopen(paths[file], "wb");
    assert_non_null(out);
    assert_int_equal(fwrite(text, 1, bytes, out), bytes);
    assert_int_equal(fclose(out), 0);
}

/* All that a reader says, as lines "file:number>source|target|target"; the pieces of a long line are put together. */
static void story_add(struct windrow_buffer *story, const struct windrow_dump_chunk *chunk)
{
    static struct {
        uint8_t data[WINDROW_DUMP_FIELD_BYTES_MAX + 1];
        size_t bytes;
    } source; /* of the last line, which a continued line repeats */
    struct windrow_dump_lines lines;
    struct windrow_dump_line line;
    struct windrow_dump_target target;
    char head[64];
    windrow_dump_lines_begin(&lines, chunk);
    while (windrow_dump_lines_next(&lines, &line)) {
        if (!line.continued) {
            int bytes = snprintf(head, sizeof head, "\n%d:%d>", (int)chunk->file, (int)line.number);
            windrow_buffer_append(story, head, (size_t)bytes);
            if (line.malformed != NULL) {
                windrow_buffer_append(story, "?", 1);
                continue;
            }
            windrow_buffer_append(story, line.source, line.source_bytes);
            source.bytes = line.source_bytes < sizeof source.data ? line.source_bytes : sizeof source.data;
            memcpy(source.data, line.source, source.bytes);
        } else {
            assert_int_equal(line.source_bytes, source.bytes);
            assert_true(source.bytes == 0 || memcmp(line.source, source.data, source.bytes) == 0);
        }
        while (windrow_dump_line_target(&line, &target)) {
            windrow_buffer_append(story, target.nofollow ? "!" : "|", 1);
            windrow_buffer_append(story, target.text, target.bytes);
        }
    }
}

static struct windrow_dump_options options_for(size_t path_count, enum windrow_dump_shape shape, size_t chunk_bytes)
{
    return (struct windrow_dump_options){
        .paths = names, .path_count = path_count, .shape = shape, .with_ids = true, .chunk_bytes = chunk_bytes};
}

/* Reads everything; with stop_every > 0 a new reader goes on after so many chunks. */
static struct windrow_buffer story_read(struct windrow_dump_options options, size_t stop_every, size_t *largest_bytes)
{
    struct windrow_buffer story = {0};
    struct windrow_dump_chunk chunk = {0};
    struct windrow_dump_position position = {0}, *resume = NULL;
    struct windrow_dump *dump;
    bool ended = false;
    *largest_bytes = 0;
    while (!ended) {
        if (windrow_dump_open(&options, resume, &dump) != WINDROW_OK)
            fail_msg("%s", windrow_message());
        for (size_t read = 0; !ended && (stop_every == 0 || read < stop_every); read++) {
            if (windrow_dump_read(dump, &chunk) != WINDROW_OK)
                fail_msg("%s", windrow_message());
            ended = chunk.bytes == 0;
            if (!ended)
                story_add(&story, &chunk);
            if (chunk.capacity_bytes > *largest_bytes)
                *largest_bytes = chunk.capacity_bytes;
            /* What reading looks at afterwards must not change it. */
            if (chunk.bytes > 0)
                memset(chunk.text, 'x', chunk.bytes);
            position = chunk.end;
            resume = &position;
        }
        windrow_dump_close(dump);
    }
    windrow_dump_chunk_free(&chunk);
    windrow_buffer_append(&story, "", 1);
    return story;
}

static void check_story(size_t path_count, enum windrow_dump_shape shape, size_t chunk_bytes, size_t stop_every,
                        const char *expected)
{
    size_t largest_bytes;
    struct windrow_buffer story = story_read(options_for(path_count, shape, chunk_bytes), stop_every, &largest_bytes);
    if (strcmp((char *)story.data, expected) != 0)
        fail_msg("chunks of %zu, stop every %zu: %.2000s\ninstead of %.2000s", chunk_bytes, stop_every, (char *)story.data,
                 expected);
    windrow_buffer_free(&story);
}

static void files_come_in_order_with_their_own_shapes(void **state)
{
    (void)state;
    file_write(0, "a:\tb:\tnofollow\n\nc:", 18);
    file_write(1, "", 0);
    file_write(2, "a:\tb:\tc:\r\nd:\n", 13);
    for (size_t chunk_bytes = 0; chunk_bytes < 40; chunk_bytes++)
        for (size_t stop_every = 0; stop_every < 4; stop_every++)
            check_story(3, WINDROW_DUMP_AUTO, chunk_bytes, stop_every, "\n0:1>a:!b:\n0:3>c:\n2:1>a:|b:|c:\n2:2>d:");
}

static void shape_can_be_forced(void **state)
{
    (void)state;
    file_write(0, "a:\tb:\tnofollow\n", 15);
    check_story(1, WINDROW_DUMP_LISTS, 0, 0, "\n0:1>a:|b:|nofollow");
    file_write(0, "a:\tb:\tc:\n", 9);
    check_story(1, WINDROW_DUMP_PAIRS, 0, 0, "\n0:1>?");
}

static void ids_need_somebody_who_knows_their_names(void **state)
{
    (void)state;
    struct windrow_dump *dump;
    struct windrow_dump_chunk chunk = {0};
    struct windrow_dump_options options = options_for(1, WINDROW_DUMP_AUTO, 0);
    options.with_ids = false;
    file_write(0, "1\t2\n", 4);
    assert_int_equal(windrow_dump_open(&options, NULL, &dump), WINDROW_OK);
    assert_int_equal(windrow_dump_read(dump, &chunk), WINDROW_USAGE);
    assert_non_null(strstr(windrow_message(), "--names"));
    assert_non_null(strstr(windrow_message(), paths[0]));
    windrow_dump_close(dump);
    windrow_dump_chunk_free(&chunk);
    options.shape = WINDROW_DUMP_IDS;
    assert_int_equal(windrow_dump_open(&options, NULL, &dump), WINDROW_USAGE);
    assert_non_null(strstr(windrow_message(), "--names"));
    assert_null(dump);
    options.with_ids = true;
    assert_int_equal(windrow_dump_open(&options, NULL, &dump), WINDROW_OK);
    windrow_dump_close(dump);
}

static void ids_stand_between_other_shapes(void **state)
{
    (void)state;
    file_write(0, "7\t8 9\n  10\n", 11);
    file_write(1, "a:\tb:\tc:\n", 9);
    file_write(2, "18446744073709551615 7\t\n", 24);
    for (size_t chunk_bytes = 0; chunk_bytes < 40; chunk_bytes++)
        for (size_t stop_every = 0; stop_every < 4; stop_every++)
            check_story(3, WINDROW_DUMP_AUTO, chunk_bytes, stop_every, "\n0:1>7|8|9\n0:2>10\n1:1>a:|b:|c:\n2:1>18446744073709551615|7");
}

/* Random dumps: long and short lines, blank fields, blank lines, missing last newline. */
static size_t dump_make(char *text, enum windrow_dump_shape shape)
{
    size_t bytes = 0;
    bool lists = shape != WINDROW_DUMP_PAIRS;
    const char *letters_of = shape == WINDROW_DUMP_IDS ? "12 \r " : "ab: \r";
    for (long lines = random() % 12; lines > 0; lines--) {
        long fields = lists ? random() % (random() % 4 == 0 ? 40 : 4) : random() % 5;
        for (long field = 0; field < fields; field++) {
            if (field > 0)
                text[bytes++] = '\t';
            if (!lists && field == 2)
                bytes += (size_t)sprintf(text + bytes, "%s", random() % 4 ? "nofollow" : "x:");
            else
                for (long letters = random() % 6; letters > 0; letters--)
                    text[bytes++] = letters_of[random() % 5];
        }
        if (lines > 1 || random() % 2)
            text[bytes++] = '\n';
    }
    return bytes;
}

static void chunks_and_stops_do_not_show(void **state)
{
    (void)state;
    srandom(17);
    static char text[8192];
    for (int round = 0; round < 300; round++) {
        enum windrow_dump_shape shape = (enum windrow_dump_shape)(WINDROW_DUMP_PAIRS + round % 3);
        for (int file = 0; file < 2; file++)
            file_write(file, text, dump_make(text, shape));
        size_t largest_bytes;
        struct windrow_buffer whole = story_read(options_for(2, shape, 0), 0, &largest_bytes);
        for (int trial = 0; trial < 6; trial++)
            check_story(2, shape, 1 + (size_t)random() % (trial < 3 ? 20 : 400), (size_t)trial % 3, (char *)whole.data);
        windrow_buffer_free(&whole);
    }
}

static void long_lists_are_split_with_their_source_repeated(void **state)
{
    (void)state;
    /* Three megabytes in one line, as real crawls have them, between two short ones. */
    enum { TARGETS = 100000 };
    struct windrow_buffer text = {0}, expected = {0};
    windrow_buffer_append(&text, "x:\ty:\nsource:", 13);
    windrow_buffer_append(&expected, "\n0:1>x:|y:\n0:2>source:", 22);
    for (int i = 0; i < TARGETS; i++) {
        char target[64];
        int bytes = snprintf(target, sizeof target, "\ttarget-number-%d:", i);
        windrow_buffer_append(&text, target, (size_t)bytes);
        target[0] = '|';
        windrow_buffer_append(&expected, target, (size_t)bytes);
    }
    windrow_buffer_append(&text, "\nz:", 3);
    windrow_buffer_append(&expected, "\n0:3>z:", 8);
    file_write(0, (char *)text.data, text.bytes);
    check_story(1, WINDROW_DUMP_AUTO, 0, 0, (char *)expected.data);
    check_story(1, WINDROW_DUMP_AUTO, 0, 1, (char *)expected.data);
    check_story(1, WINDROW_DUMP_LISTS, 10000, 40, (char *)expected.data);

    struct windrow_dump *dump;
    struct windrow_dump_chunk chunk = {0};
    struct windrow_dump_options options = options_for(1, WINDROW_DUMP_AUTO, 1000);
    assert_int_equal(windrow_dump_open(&options, NULL, &dump), WINDROW_OK);
    for (size_t read = 0; read < 5; read++) {
        assert_int_equal(windrow_dump_read(dump, &chunk), WINDROW_OK);
        assert_int_equal(chunk.first_line, read == 0 ? 1 : 2);
        assert_int_equal(chunk.continued, read > 1);
        assert_true(chunk.bytes < 1100);
        assert_int_equal(chunk.end.line, 1);
    }
    windrow_dump_close(dump);
    windrow_dump_chunk_free(&chunk);
    windrow_buffer_free(&text);
    windrow_buffer_free(&expected);
}

static void position_inside_a_late_line_finds_its_source(void **state)
{
    (void)state;
    /* More than what is read at a time lies in front of the long line. */
    struct windrow_buffer text = {0}, expected = {0};
    for (int i = 1; i <= 60000; i++) {
        char line[64];
        windrow_buffer_append(&text, "before:\tit:\n", 12);
        windrow_buffer_append(&expected, line, (size_t)snprintf(line, sizeof line, "\n0:%d>before:|it:", i));
    }
    windrow_buffer_append(&text, "source:\tb:\tc:\td:\te:\n", 20);
    windrow_buffer_append(&expected, "\n0:60001>source:|b:|c:|d:|e:", 29);
    file_write(0, (char *)text.data, text.bytes);
    struct windrow_buffer tail = {0};
    struct windrow_dump_options options = options_for(1, WINDROW_DUMP_LISTS, 12 * 1000);
    struct windrow_dump_chunk chunk = {0};
    struct windrow_dump_position position = {0};
    for (int read = 0; read < 70; read++) {
        struct windrow_dump *dump;
        /* The long line comes in pieces when chunks are small. */
        options.chunk_bytes = read < 60 ? 12 * 1000 : 10;
        assert_int_equal(windrow_dump_open(&options, &position, &dump), WINDROW_OK);
        assert_int_equal(windrow_dump_read(dump, &chunk), WINDROW_OK);
        position = chunk.end;
        story_add(&tail, &chunk);
        windrow_dump_close(dump);
        if (chunk.bytes == 0)
            break;
    }
    windrow_buffer_append(&tail, "", 1);
    assert_string_equal((char *)tail.data, (char *)expected.data);
    windrow_dump_chunk_free(&chunk);
    windrow_buffer_free(&tail);
    windrow_buffer_free(&text);
    windrow_buffer_free(&expected);
}

static void lines_are_counted_however_many_there_are(void **state)
{
    (void)state;
    char text[10002];
    memset(text, '\n', 10000);
    memcpy(text + 10000, "a:", 2);
    file_write(0, text, sizeof text);
    check_story(1, WINDROW_DUMP_AUTO, 10000, 0, "\n0:10001>a:");
    check_story(1, WINDROW_DUMP_AUTO, 0, 0, "\n0:10001>a:");
}

static void byte_order_mark_stays_out_of_split_lines(void **state)
{
    (void)state;
    file_write(0, "\xEF\xBB\xBF" "a:\tb:\tc:\td:\te:\n", 18);
    for (size_t chunk_bytes = 1; chunk_bytes < 30; chunk_bytes++)
        check_story(1, WINDROW_DUMP_LISTS, chunk_bytes, chunk_bytes % 2, "\n0:1>a:|b:|c:|d:|e:");
}

/* Many megabytes without a newline, or without a TAB, must not need them in memory, and must not take what follows along. */
static void endless_lines_are_bounded(void **state)
{
    (void)state;
    enum { ENDLESS_BYTES = 24 << 20 };
    static const struct {
        const char *start, *filling, *end;
        enum windrow_dump_shape shape;
    } cases[] = {
        {"a:\tb:\n", "x", "\nc:\td:\n", WINDROW_DUMP_PAIRS},  {"a:\tb:\n", "x", "\nc:\td:\n", WINDROW_DUMP_LISTS},
        {"a:\tb:\n", "\t", "\nc:\td:\n", WINDROW_DUMP_PAIRS}, {"a:\tb:\n", "\t", "\nc:\td:\n", WINDROW_DUMP_LISTS},
        {"a:\tb:\ne:\t", "x", "\tf:\nc:\td:\n", WINDROW_DUMP_LISTS},
        {"a:\tb:\ne:\t", " \t", "\tf:\nc:\td:\n", WINDROW_DUMP_LISTS},
        {"a:\tb:\n", "\0", "\nc:\td:\n", WINDROW_DUMP_LISTS},
    };
    char *text = malloc(ENDLESS_BYTES + 64);
    for (size_t i = 0; i < sizeof cases / sizeof *cases; i++) {
        size_t filling_bytes = strlen(cases[i].filling), bytes = strlen(cases[i].start);
        memcpy(text, cases[i].start, bytes);
        for (size_t at = 0; at < ENDLESS_BYTES; at++)
            text[bytes++] = cases[i].filling[filling_bytes > 0 ? at % filling_bytes : 0];
        memcpy(text + bytes, cases[i].end, strlen(cases[i].end));
        file_write(0, text, bytes + strlen(cases[i].end));
        for (size_t chunk_bytes = 1000; chunk_bytes <= 1 << 20; chunk_bytes <<= 10) {
            size_t largest_bytes;
            struct windrow_buffer story = story_read(options_for(1, cases[i].shape, chunk_bytes), 0, &largest_bytes);
            assert_true(largest_bytes < 2 * (chunk_bytes + 2 * WINDROW_DUMP_FIELD_BYTES_MAX + WINDROW_DUMP_PAIR_BYTES_MAX));
            assert_memory_equal(story.data, "\n0:1>a:|b:", 10);
            assert_string_equal((char *)story.data + story.bytes - 11, "\n0:3>c:|d:");
            windrow_buffer_free(&story);
        }
    }
    free(text);
}

static void other_streams_are_refused_on_resume(void **state)
{
    (void)state;
    struct windrow_dump *dump;
    struct windrow_dump_chunk chunk = {0};
    struct windrow_dump_options options = options_for(2, WINDROW_DUMP_AUTO, 8);
    file_write(0, "a:\tb:\nc:\td:\ne:\tf:\n", 18);
    file_write(1, "g:\th:\n", 6);
    assert_int_equal(windrow_dump_open(&options, NULL, &dump), WINDROW_OK);
    assert_int_equal(windrow_dump_read(dump, &chunk), WINDROW_OK);
    windrow_dump_close(dump);
    struct windrow_dump_position position = chunk.end;
    assert_int_equal(position.file, 0);
    assert_int_equal(position.bytes, 6);
    assert_int_equal(position.line, 1);

    file_write(0, "a:\tx:\nc:\td:\ne:\tf:\n", 18);
    assert_int_equal(windrow_dump_open(&options, &position, &dump), WINDROW_INPUT);
    assert_null(dump);
    assert_non_null(strstr(windrow_message(), "not the same stream"));
    assert_non_null(strstr(windrow_message(), paths[0]));
    file_write(0, "a:\t", 3);
    assert_int_equal(windrow_dump_open(&options, &position, &dump), WINDROW_INPUT);

    /* What comes after the position is free to have grown; files before it are not read again. */
    file_write(0, "a:\tb:\nz:\n", 9);
    assert_int_equal(windrow_dump_open(&options, &position, &dump), WINDROW_OK);
    assert_int_equal(windrow_dump_read(dump, &chunk), WINDROW_OK);
    assert_int_equal(chunk.first_line, 2);
    assert_memory_equal(chunk.text, "z:\n", 3);
    assert_int_equal(windrow_dump_read(dump, &chunk), WINDROW_OK);
    assert_int_equal(chunk.file, 1);
    position = chunk.end;
    windrow_dump_close(dump);

    assert_int_equal(position.file, 2);
    assert_int_equal(position.bytes, 0);
    assert_int_equal(windrow_dump_open(&options, &position, &dump), WINDROW_OK);
    uint64_t consumed_bytes, total_bytes;
    windrow_dump_progress(dump, &consumed_bytes, &total_bytes);
    assert_int_equal(consumed_bytes, total_bytes);
    assert_int_equal(windrow_dump_read(dump, &chunk), WINDROW_OK);
    assert_int_equal(chunk.bytes, 0);
    windrow_dump_close(dump);

    position.file = 3;
    assert_int_equal(windrow_dump_open(&options, &position, &dump), WINDROW_INPUT);
    windrow_dump_chunk_free(&chunk);
}

static void progress_counts_all_files(void **state)
{
    (void)state;
    struct windrow_dump *dump;
    struct windrow_dump_chunk chunk = {0};
    struct windrow_dump_options options = options_for(2, WINDROW_DUMP_AUTO, 0);
    file_write(0, "a:\tb:\n", 6);
    file_write(1, "g:\th:\ni:\n", 9);
    assert_int_equal(windrow_dump_open(&options, NULL, &dump), WINDROW_OK);
    uint64_t consumed_bytes, total_bytes;
    windrow_dump_progress(dump, &consumed_bytes, &total_bytes);
    assert_int_equal(consumed_bytes, 0);
    assert_int_equal(total_bytes, 15);
    do
        assert_int_equal(windrow_dump_read(dump, &chunk), WINDROW_OK);
    while (chunk.bytes > 0);
    windrow_dump_progress(dump, &consumed_bytes, &total_bytes);
    assert_int_equal(consumed_bytes, 15);
    assert_string_equal(windrow_dump_file_name(dump, 1), paths[1]);
    windrow_dump_close(dump);
    windrow_dump_chunk_free(&chunk);
}

static void names_that_cannot_be_read_are_known_at_once(void **state)
{
    (void)state;
    struct windrow_dump *dump;
    file_write(0, "a:\tb:\n", 6);
    const char *const missing[] = {paths[0], "/nowhere/at-all"};
    struct windrow_dump_options options = {.paths = missing, .path_count = 2};
    assert_int_equal(windrow_dump_open(&options, NULL, &dump), WINDROW_INPUT);
    assert_non_null(strstr(windrow_message(), "/nowhere/at-all"));
    const char *const folder[] = {directory};
    options = (struct windrow_dump_options){.paths = folder, .path_count = 1};
    assert_int_equal(windrow_dump_open(&options, NULL, &dump), WINDROW_INPUT);
    const char *const twice[] = {"-", paths[0], "-"};
    options = (struct windrow_dump_options){.paths = twice, .path_count = 3};
    assert_int_equal(windrow_dump_open(&options, NULL, &dump), WINDROW_USAGE);
    options.path_count = 0;
    assert_int_equal(windrow_dump_open(&options, NULL, &dump), WINDROW_USAGE);
    windrow_dump_close(NULL);
}

static void standard_input_is_read_from_a_pipe(void **state)
{
    (void)state;
    int ends[2], kept = dup(STDIN_FILENO);
    assert_int_equal(pipe(ends), 0);
    assert_int_equal(write(ends[1], "a:\tb:\n", 6), 6);
    close(ends[1]);
    dup2(ends[0], STDIN_FILENO);
    close(ends[0]);
    static const char *const standard_input[] = {"-"};
    struct windrow_dump_options options = {.paths = standard_input, .path_count = 1};
    struct windrow_dump *dump;
    struct windrow_dump_chunk chunk = {0};
    assert_int_equal(windrow_dump_open(&options, NULL, &dump), WINDROW_OK);
    uint64_t consumed_bytes, total_bytes;
    windrow_dump_progress(dump, &consumed_bytes, &total_bytes);
    assert_int_equal(total_bytes, 0);
    assert_string_equal(windrow_dump_file_name(dump, 0), "standard input");
    assert_int_equal(windrow_dump_read(dump, &chunk), WINDROW_OK);
    assert_int_equal(chunk.bytes, 6);
    assert_memory_equal(chunk.text, "a:\tb:\n", 6);
    windrow_dump_close(dump);
    windrow_dump_chunk_free(&chunk);
    dup2(kept, STDIN_FILENO);
    close(kept);
}

static ssize_t (*true_read)(int descriptor, void *bytes, size_t count);
static int reads_left;

static ssize_t failing_read(int descriptor, void *bytes, size_t count)
{
    if (reads_left-- > 0)
        return true_read(descriptor, bytes, count);
    errno = EIO;
    return -1;
}

static void failing_reads_are_reported(void **state)
{
    (void)state;
    true_read = windrow_files.read;
    windrow_files.read = failing_read;
    file_write(0, "a:\tb:\n", 6);
    for (reads_left = 0; reads_left < 2;) {
        int reads = reads_left;
        struct windrow_dump *dump;
        struct windrow_dump_chunk chunk = {0};
        struct windrow_dump_options options = options_for(1, WINDROW_DUMP_AUTO, 0);
        assert_int_equal(windrow_dump_open(&options, NULL, &dump), WINDROW_OK);
        assert_int_equal(windrow_dump_read(dump, &chunk), WINDROW_INPUT);
        assert_non_null(strstr(windrow_message(), paths[0]));
        assert_int_equal(chunk.bytes, 0);
        windrow_dump_close(dump);
        windrow_dump_chunk_free(&chunk);
        reads_left = reads + 1;
    }
    windrow_files.read = true_read;
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(files_come_in_order_with_their_own_shapes),
        cmocka_unit_test(shape_can_be_forced),
        cmocka_unit_test(ids_need_somebody_who_knows_their_names),
        cmocka_unit_test(ids_stand_between_other_shapes),
        cmocka_unit_test(chunks_and_stops_do_not_show),
        cmocka_unit_test(long_lists_are_split_with_their_source_repeated),
        cmocka_unit_test(position_inside_a_late_line_finds_its_source),
        cmocka_unit_test(lines_are_counted_however_many_there_are),
        cmocka_unit_test(byte_order_mark_stays_out_of_split_lines),
        cmocka_unit_test(endless_lines_are_bounded),
        cmocka_unit_test(other_streams_are_refused_on_resume),
        cmocka_unit_test(progress_counts_all_files),
        cmocka_unit_test(names_that_cannot_be_read_are_known_at_once),
        cmocka_unit_test(standard_input_is_read_from_a_pipe),
        cmocka_unit_test(failing_reads_are_reported),
    };
    return cmocka_run_group_tests(tests, directory_make, directory_drop);
}
