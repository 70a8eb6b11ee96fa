#include "shard/places.h"

#include "base/file.h"
#include "dump/stream.h"

#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>
#include <xxhash.h>

/* A line that begins in a window is read to its end, but not further than this. */
#define LINE_BYTES_MAX (UINT64_C(8) << 20)
/* A compressed file's share of the budget is looked up this often. */
#define PREFIX_CHUNK_BYTES ((size_t)256 << 10)

struct windrow_places {
    const char *const *dumps;
    size_t dump_count;
    enum windrow_dump_shape shape;
    enum windrow_plan_basis basis;
    uint64_t budget_bytes;
    uint64_t *file_bytes;        /* on disk; 0 for pipes */
    uint64_t total_bytes;        /* of all files; 0 when one is a pipe */
    uint32_t place;

    /* whole and prefix */
    struct windrow_dump *dump;
    uint64_t read_bytes;         /* of the dumps, decompressed */
    uint64_t consumed_before;    /* prefix: on disk, of the files before this one */
    uint64_t file_read_bytes;    /* prefix: decompressed, of this file */

    /* prefix and places */
    size_t file;

    /* places */
    uint64_t window_count;       /* of all files */
    uint64_t next_window;
    uint64_t wanted_count;
    uint64_t taken_count;
    uint64_t taken_bytes;        /* of windows; the last one of a file may be short */
    uint64_t file_window;        /* the file's first window */
    int descriptor;
    enum windrow_dump_shape file_shape;
};

/* Whether a file's text is what lies on disk: its first bytes as they are read are its first bytes. */
static enum windrow_status look_at(const char *path, bool *plain)
{
    atomic_uint_fast64_t consumed = 0;
    struct windrow_stream *stream = NULL;
    char text[4096], raw[sizeof text];
    size_t bytes = 0;
    int descriptor = -1;
    enum windrow_status status = windrow_stream_open(path, &consumed, &stream);
    if (!status)
        status = windrow_stream_read(stream, text, sizeof text, &bytes);
    if (!status && (descriptor = windrow_files.open(path, O_RDONLY | O_CLOEXEC, 0)) < 0)
        status = windrow_fail_system(WINDROW_INPUT, errno, "cannot open the dump %s", path);
    if (!status) {
        ssize_t got = windrow_files.read_at(descriptor, raw, sizeof raw, 0);
        *plain = got >= 0 && (size_t)got >= bytes && memcmp(text, raw, bytes) == 0 && (bytes > 0 || got == 0);
    }
    if (descriptor >= 0)
        windrow_files.close(descriptor);
    windrow_stream_close(stream);
    return status;
}

static enum windrow_status measure(struct windrow_places *places, bool full, bool *all_plain)
{
    bool pipe = false;
    *all_plain = true;
    for (size_t file = 0; file < places->dump_count; file++) {
        const char *path = places->dumps[file];
        struct stat stat_of;
        bool standard_input = strcmp(path, "-") == 0;
        if ((standard_input ? fstat(STDIN_FILENO, &stat_of) : stat(path, &stat_of)) != 0)
            return windrow_fail_system(WINDROW_INPUT, errno, "cannot open the dump %s", path);
        if (standard_input || !S_ISREG(stat_of.st_mode)) {
            pipe = true;
            *all_plain = false;
            if (!full)
                return windrow_fail(WINDROW_USAGE, "how long %s is cannot be known from its beginning; read it to its end with --full",
                                    standard_input ? "standard input" : path);
            continue;
        }
        bool plain = true;
        enum windrow_status status = full ? WINDROW_OK : look_at(path, &plain);
        if (status)
            return status;
        *all_plain &= plain;
        places->file_bytes[file] = (uint64_t)stat_of.st_size;
        places->total_bytes += (uint64_t)stat_of.st_size;
    }
    if (pipe)
        places->total_bytes = 0;
    return WINDROW_OK;
}

static enum windrow_status open_dumps(struct windrow_places *places, const char *const *paths, size_t count)
{
    struct windrow_dump_options options = {.paths = paths, .path_count = count, .shape = places->shape,
                                           .chunk_bytes = places->basis == WINDROW_PLAN_PREFIX ? PREFIX_CHUNK_BYTES : 0};
    return windrow_dump_open(&options, NULL, &places->dump);
}

static uint64_t windows_of(const struct windrow_places *places, size_t file)
{
    return (places->file_bytes[file] + WINDROW_PLACES_WINDOW_BYTES - 1) / WINDROW_PLACES_WINDOW_BYTES;
}

enum windrow_status windrow_places_open(const char *const *dumps, size_t dump_count, enum windrow_shape shape, bool full, uint64_t budget_bytes,
                                        struct windrow_places **out)
{
    *out = NULL;
    bool all_plain;
    struct windrow_places *places = calloc(1, sizeof *places);
    if (!places)
        return windrow_fail(WINDROW_RESOURCE, "out of memory for reading dumps");
    *places = (struct windrow_places){.dumps = dumps, .dump_count = dump_count, .shape = (enum windrow_dump_shape)shape, .descriptor = -1,
                                      .budget_bytes = budget_bytes};
    places->file_bytes = calloc(dump_count + 1, sizeof *places->file_bytes);
    enum windrow_status status = places->file_bytes ? WINDROW_OK : windrow_fail(WINDROW_RESOURCE, "out of memory for reading dumps");
    if (!status)
        status = measure(places, full, &all_plain);
    if (!status) {
        places->basis = full || (all_plain && places->total_bytes <= budget_bytes) ? WINDROW_PLAN_WHOLE
                        : all_plain                                                ? WINDROW_PLAN_PLACES
                                                                                   : WINDROW_PLAN_PREFIX;
        for (size_t file = 0; file < dump_count; file++)
            places->window_count += windows_of(places, file);
        places->wanted_count = budget_bytes / WINDROW_PLACES_WINDOW_BYTES;
        if (places->wanted_count < 2)
            places->wanted_count = 2;
        if (places->basis == WINDROW_PLAN_WHOLE)
            status = open_dumps(places, dumps, dump_count);
    }
    if (status) {
        windrow_places_close(places);
        return status;
    }
    *out = places;
    return WINDROW_OK;
}

void windrow_places_close(struct windrow_places *places)
{
    if (!places)
        return;
    windrow_dump_close(places->dump);
    if (places->descriptor >= 0)
        windrow_files.close(places->descriptor);
    free(places->file_bytes);
    free(places);
}

static enum windrow_status read_whole(struct windrow_places *places, struct windrow_dump_chunk *chunk)
{
    enum windrow_status status = windrow_dump_read(places->dump, chunk);
    places->place = 1;
    places->read_bytes += chunk->bytes;
    return status;
}

/* ---- Beginnings ---- */

static void end_prefix(struct windrow_places *places)
{
    uint64_t consumed, total;
    windrow_dump_progress(places->dump, &consumed, &total);
    places->consumed_before += consumed;
    windrow_dump_close(places->dump);
    places->dump = NULL;
    places->file_read_bytes = 0;
    places->file++;
}

static enum windrow_status read_prefix(struct windrow_places *places, struct windrow_dump_chunk *chunk)
{
    enum windrow_status status = WINDROW_OK;
    chunk->bytes = 0;
    while (!status && !chunk->bytes && places->file < places->dump_count) {
        double budget = (double)places->budget_bytes * (double)places->file_bytes[places->file] / (double)places->total_bytes;
        if (!places->dump && (status = open_dumps(places, &places->dumps[places->file], 1)))
            break;
        if ((double)places->file_read_bytes < budget)
            status = windrow_dump_read(places->dump, chunk);
        if (!status && !chunk->bytes)
            end_prefix(places);
    }
    chunk->file = places->file;
    places->file_read_bytes += chunk->bytes;
    places->read_bytes += chunk->bytes;
    places->place += chunk->bytes > 0;
    return status;
}

/* ---- Windows ---- */

static enum windrow_status append_at(const struct windrow_places *places, struct windrow_dump_chunk *chunk, uint64_t offset, size_t count)
{
    if (chunk->bytes + count > chunk->capacity_bytes) {
        char *text = realloc(chunk->text, chunk->bytes + count);
        if (!text)
            return windrow_fail(WINDROW_RESOURCE, "out of memory for reading dumps");
        chunk->text = text;
        chunk->capacity_bytes = chunk->bytes + count;
    }
    enum windrow_status status = windrow_file_read_at(places->descriptor, places->dumps[places->file], chunk->text + chunk->bytes, count, offset);
    if (status == WINDROW_DAMAGED)
        status = WINDROW_INPUT;
    if (!status)
        chunk->bytes += count;
    return status;
}

static enum windrow_status open_window_file(struct windrow_places *places)
{
    const char *path = places->dumps[places->file];
    uint64_t bytes = places->file_bytes[places->file];
    struct windrow_dump_chunk sample = {0};
    places->descriptor = windrow_files.open(path, O_RDONLY | O_CLOEXEC, 0);
    if (places->descriptor < 0)
        return windrow_fail_system(WINDROW_INPUT, errno, "cannot open the dump %s", path);
    enum windrow_status status = WINDROW_OK;
    places->file_shape = places->shape;
    if (places->shape == WINDROW_DUMP_AUTO) {
        bool whole = bytes <= WINDROW_DUMP_SAMPLE_BYTES;
        status = append_at(places, &sample, 0, whole ? (size_t)bytes : WINDROW_DUMP_SAMPLE_BYTES);
        if (!status)
            places->file_shape = windrow_dump_shape_recognise(sample.text, sample.bytes, whole);
        windrow_dump_chunk_free(&sample);
    }
    if (!status && places->file_shape == WINDROW_DUMP_IDS)
        status = windrow_fail(WINDROW_USAGE, "%s holds numeric ids, which plan does not read; it reads pairs and lists of URLs", path);
    return status;
}

/* The lines that begin in [begin, begin + a window) of the open file. */
static enum windrow_status read_window(struct windrow_places *places, struct windrow_dump_chunk *chunk, uint64_t begin)
{
    uint64_t file_bytes = places->file_bytes[places->file], end = begin + WINDROW_PLACES_WINDOW_BYTES;
    if (end > file_bytes)
        end = file_bytes;
    uint64_t from = begin ? begin - 1 : 0; /* the newline before, should a line begin right here */
    chunk->bytes = 0;
    chunk->shape = places->file_shape;
    chunk->file = places->file;
    chunk->first_line = 1;
    chunk->continued = false;
    enum windrow_status status = append_at(places, chunk, from, (size_t)(end - from));
    if (status)
        return status;
    size_t skipped = 0;
    if (begin) {
        const char *newline = memchr(chunk->text, '\n', chunk->bytes);
        skipped = newline ? (size_t)(newline - chunk->text) + 1 : chunk->bytes;
    }
    if (skipped == chunk->bytes) {
        chunk->bytes = 0;
        return WINDROW_OK;
    }
    /* The last line to its end. */
    size_t looked_at = chunk->bytes;
    bool ended = chunk->text[looked_at - 1] == '\n';
    uint64_t most = end + LINE_BYTES_MAX;
    while (!ended && end < file_bytes && end < most) {
        size_t more = file_bytes - end < (64u << 10) ? (size_t)(file_bytes - end) : 64u << 10;
        if ((status = append_at(places, chunk, end, more)))
            return status;
        end += more;
        const char *newline = memchr(chunk->text + looked_at, '\n', chunk->bytes - looked_at);
        if (newline) {
            ended = true;
            chunk->bytes = (size_t)(newline - chunk->text) + 1;
        }
        looked_at = chunk->bytes;
    }
    chunk->bytes -= skipped;
    memmove(chunk->text, chunk->text + skipped, chunk->bytes);
    return WINDROW_OK;
}

static enum windrow_status read_places(struct windrow_places *places, struct windrow_dump_chunk *chunk)
{
    enum windrow_status status = WINDROW_OK;
    chunk->bytes = 0;
    while (!status && !chunk->bytes && places->next_window < places->window_count) {
        /* As many as are still wanted out of those that are left: every choice of windows is equally likely (selection
         * sampling, Fan, Muller & Rezucha 1962). */
        uint64_t left = places->window_count - places->next_window, window = places->next_window++;
        double chance = (double)(XXH3_64bits(&window, sizeof window) >> 11) * 0x1p-53;
        if (chance * (double)left >= (double)(places->wanted_count - places->taken_count))
            continue;
        while (window >= places->file_window + windows_of(places, places->file)) {
            places->file_window += windows_of(places, places->file++);
            if (places->descriptor >= 0)
                windrow_files.close(places->descriptor);
            places->descriptor = -1;
        }
        if (places->descriptor < 0 && (status = open_window_file(places)))
            break;
        uint64_t at = (window - places->file_window) * WINDROW_PLACES_WINDOW_BYTES, left_bytes = places->file_bytes[places->file] - at;
        status = read_window(places, chunk, at);
        places->taken_count++;
        places->taken_bytes += left_bytes < WINDROW_PLACES_WINDOW_BYTES ? left_bytes : WINDROW_PLACES_WINDOW_BYTES;
        places->place++; /* a window in which no line begins is a place too: one without anything new */
    }
    places->read_bytes += chunk->bytes;
    return status;
}

enum windrow_status windrow_places_read(struct windrow_places *places, struct windrow_dump_chunk *chunk, uint32_t *place)
{
    enum windrow_status status = places->basis == WINDROW_PLAN_WHOLE    ? read_whole(places, chunk)
                                 : places->basis == WINDROW_PLAN_PREFIX ? read_prefix(places, chunk)
                                                                        : read_places(places, chunk);
    if (status)
        chunk->bytes = 0;
    *place = places->place;
    return status;
}

enum windrow_plan_basis windrow_places_basis(const struct windrow_places *places)
{
    return places->basis;
}

uint32_t windrow_places_count(const struct windrow_places *places)
{
    return places->place ? places->place : 1;
}

static uint64_t consumed_bytes(const struct windrow_places *places)
{
    uint64_t consumed = 0, total;
    if (places->dump)
        windrow_dump_progress(places->dump, &consumed, &total);
    return places->consumed_before + consumed;
}

double windrow_places_progress(const struct windrow_places *places)
{
    switch (places->basis) {
    case WINDROW_PLAN_WHOLE: return places->total_bytes ? (double)consumed_bytes(places) / (double)places->total_bytes : -1;
    case WINDROW_PLAN_PLACES: return (double)places->next_window / (double)places->window_count;
    default: return (double)places->read_bytes / (double)places->budget_bytes;
    }
}

double windrow_places_share(const struct windrow_places *places)
{
    double share = 1;
    if (places->basis == WINDROW_PLAN_PLACES)
        share = (double)places->taken_bytes / (double)places->total_bytes;
    else if (places->basis == WINDROW_PLAN_PREFIX)
        share = places->total_bytes ? (double)consumed_bytes(places) / (double)places->total_bytes : 1;
    return share > 1 ? 1 : share;
}
