/* Any bytes as a dump: no crash, and the same story for any size of chunks and any stops.
 *
 * The first byte chooses the shape and the size of small chunks; the rest is the file. As a fuzzer:
 *   clang -std=gnu11 -D_GNU_SOURCE -g -O1 -fsanitize=fuzzer,address,undefined -DWINDROW_FUZZER -Isrc \
 *       tests/fuzz/dump_unit.c src/dump/[a-z]*.c src/base/error.c src/base/file.c -larchive -lxxhash -o dump_fuzzer
 *   ./dump_fuzzer tests/fuzz/corpus/dump
 */
#include "base/file.h"
#include "dump/reader.h"

#include "corpus.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <unistd.h>

#include <cmocka.h>

static void story_add(struct windrow_buffer *story, const struct windrow_dump_chunk *chunk)
{
    struct windrow_dump_lines lines;
    struct windrow_dump_line line;
    struct windrow_dump_target target;
    windrow_dump_lines_begin(&lines, chunk);
    while (windrow_dump_lines_next(&lines, &line)) {
        if (!line.continued) {
            windrow_buffer_append(story, "\n", 1);
            windrow_buffer_append(story, &line.number, sizeof line.number);
            windrow_buffer_append(story, line.malformed != NULL ? "?" : ">", 1);
        }
        if (line.malformed != NULL)
            continue;
        if (!line.continued)
            windrow_buffer_append(story, line.source, line.source_bytes);
        while (windrow_dump_line_target(&line, &target)) {
            windrow_buffer_append(story, target.nofollow ? "!" : "|", 1);
            windrow_buffer_append(story, target.text, target.bytes);
        }
    }
}

/* Reads the file; a new reader goes on after each `stop_every` chunks, 0: never. */
static enum windrow_status story_read(const char *path, enum windrow_dump_shape shape, size_t chunk_bytes, size_t stop_every,
                                      struct windrow_buffer *story)
{
    struct windrow_dump_options options = {.paths = &path, .path_count = 1, .shape = shape, .with_ids = true, .chunk_bytes = chunk_bytes};
    struct windrow_dump_chunk chunk = {0};
    struct windrow_dump_position position, *resume = NULL;
    struct windrow_dump *dump = NULL;
    enum windrow_status status = WINDROW_OK;
    for (size_t read = 0;; read++) {
        if (dump == NULL || (stop_every > 0 && read % stop_every == 0)) {
            windrow_dump_close(dump);
            status = windrow_dump_open(&options, resume, &dump);
        }
        if (status == WINDROW_OK)
            status = windrow_dump_read(dump, &chunk);
        if (status != WINDROW_OK || chunk.bytes == 0)
            break;
        story_add(story, &chunk);
        position = chunk.end;
        resume = &position;
    }
    windrow_dump_close(dump);
    windrow_dump_chunk_free(&chunk);
    return status;
}

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t bytes)
{
    static int descriptor = -1;
    static char path[64];
    if (descriptor < 0) {
        descriptor = memfd_create("dump", 0);
        snprintf(path, sizeof path, "/proc/self/fd/%d", descriptor);
    }
    if (bytes == 0)
        return 0;
    enum windrow_dump_shape shape = (enum windrow_dump_shape)(data[0] % 4);
    size_t chunk_bytes = 1 + data[0] / 3;
    if (descriptor < 0 || ftruncate(descriptor, 0) != 0 || pwrite(descriptor, data + 1, bytes - 1, 0) != (ssize_t)bytes - 1)
        abort();
    struct windrow_buffer whole = {0}, pieces = {0}, stops = {0};
    enum windrow_status status = story_read(path, shape, 0, 0, &whole);
    if (status != WINDROW_OK && status != WINDROW_INPUT && status != WINDROW_USAGE)
        abort();
    /* Small chunks of a small file that unpacks to a large one would take too long. */
    if (whole.bytes < 1 << 16) {
        if (story_read(path, shape, chunk_bytes, 0, &pieces) != status || story_read(path, shape, chunk_bytes, 3, &stops) != status)
            abort();
        if (status == WINDROW_OK &&
            (whole.bytes != pieces.bytes || whole.bytes != stops.bytes ||
             (whole.bytes > 0 && (memcmp(whole.data, pieces.data, whole.bytes) != 0 ||
                                  memcmp(whole.data, stops.data, whole.bytes) != 0))))
            abort();
    }
    windrow_buffer_free(&whole);
    windrow_buffer_free(&pieces);
    windrow_buffer_free(&stops);
    return 0;
}

#ifndef WINDROW_FUZZER

static void corpus_holds(void **state)
{
    (void)state;
    assert_true(corpus_run(__FILE__, "dump", LLVMFuzzerTestOneInput) >= 10);
}

static void mutated_dumps_hold(void **state)
{
    (void)state;
    srandom(23);
    for (int round = 0; round < 3000; round++) {
        uint8_t data[400];
        size_t bytes = 1 + (size_t)random() % (sizeof data - 1);
        for (size_t i = 0; i < bytes; i++)
            data[i] = random() % 8 ? (uint8_t)"ab:/\t\t\n \r1"[random() % 10] : (uint8_t)random();
        data[0] = (uint8_t)random();
        LLVMFuzzerTestOneInput(data, bytes);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(corpus_holds),
        cmocka_unit_test(mutated_dumps_hold),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}

#endif
