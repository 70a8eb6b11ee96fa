#include "dump/reader.h"

#include "base/file.h"
#include "dump/stream.h"

#include <errno.h>
#include <inttypes.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>
#include <xxhash.h>

/* How much is read at a time where it does not go straight into a chunk. */
enum { BLOCK_BYTES = 256 << 10 };

struct windrow_dump {
    const char *const *paths;
    size_t path_count;
    enum windrow_dump_shape forced_shape;
    bool with_ids;
    size_t chunk_bytes;
    uint64_t total_bytes;
    atomic_uint_fast64_t consumed_bytes;

    /* the file that is being read */
    size_t file;
    struct windrow_stream *stream; /* NULL between files */
    bool stream_ended;
    enum windrow_dump_shape shape;
    uint64_t bytes; /* handed out */
    uint64_t line;  /* lines handed out */
    XXH3_state_t *hash;

    /* what has been read but not handed out */
    struct windrow_buffer pending;
    size_t pending_at;

    /* inside a line that is handed out in pieces: its source, and a TAB */
    bool within_line;
    struct windrow_buffer source;
};

const char *windrow_dump_file_name(const struct windrow_dump *dump, uint64_t file)
{
    return strcmp(dump->paths[file], "-") == 0 ? "standard input" : dump->paths[file];
}

void windrow_dump_progress(const struct windrow_dump *dump, uint64_t *consumed_bytes, uint64_t *total_bytes)
{
    *consumed_bytes = atomic_load_explicit(&dump->consumed_bytes, memory_order_relaxed);
    *total_bytes = dump->total_bytes;
}

static size_t pending_left(const struct windrow_dump *dump)
{
    return dump->pending.bytes - dump->pending_at;
}

static const char *pending_text(const struct windrow_dump *dump)
{
    return (const char *)dump->pending.data + dump->pending_at;
}

/* Appends up to `capacity` bytes of the stream to the pending ones. */
static enum windrow_status pending_read(struct windrow_dump *dump, size_t capacity)
{
    size_t got;
    enum windrow_status status = windrow_buffer_reserve(&dump->pending, capacity);
    if (status != WINDROW_OK)
        return status;
    status = windrow_stream_read(dump->stream, (char *)dump->pending.data + dump->pending.bytes, capacity, &got);
    if (status != WINDROW_OK)
        return status;
    dump->pending.bytes += got;
    dump->stream_ended = got == 0;
    return WINDROW_OK;
}

/* Makes sure that there is something pending, unless the file has ended. */
static enum windrow_status pending_fill(struct windrow_dump *dump)
{
    if (pending_left(dump) > 0 || dump->stream_ended)
        return WINDROW_OK;
    dump->pending.bytes = dump->pending_at = 0;
    return pending_read(dump, BLOCK_BYTES);
}

/* Counts bytes as handed out. */
static void pass(struct windrow_dump *dump, const char *text, size_t bytes)
{
    XXH3_64bits_update(dump->hash, text, bytes);
    dump->bytes += bytes;
}

/* Reads the beginning of a file and recognises its shape. */
static enum windrow_status shape_find(struct windrow_dump *dump)
{
    dump->shape = dump->forced_shape;
    if (dump->shape != WINDROW_DUMP_AUTO)
        return WINDROW_OK;
    size_t lines = 0, looked_at = 0;
    while (!dump->stream_ended && lines < WINDROW_DUMP_SAMPLE_LINES && dump->pending.bytes < WINDROW_DUMP_SAMPLE_BYTES) {
        enum windrow_status status = pending_read(dump, BLOCK_BYTES);
        if (status != WINDROW_OK)
            return status;
        while (lines < WINDROW_DUMP_SAMPLE_LINES) {
            const char *text = (const char *)dump->pending.data;
            const char *newline = memchr(text + looked_at, '\n', dump->pending.bytes - looked_at);
            looked_at = newline != NULL ? (size_t)(newline - text) + 1 : dump->pending.bytes;
            if (newline == NULL)
                break;
            lines++;
        }
    }
    /* Never more than the sample: how much a pipe hands out at a time must not decide. */
    size_t sample_bytes = dump->pending.bytes < WINDROW_DUMP_SAMPLE_BYTES ? dump->pending.bytes : WINDROW_DUMP_SAMPLE_BYTES;
    bool whole = dump->stream_ended && sample_bytes == dump->pending.bytes;
    dump->shape = windrow_dump_shape_recognise((const char *)dump->pending.data, sample_bytes, whole);
    if (dump->shape == WINDROW_DUMP_IDS && !dump->with_ids)
        return windrow_fail(WINDROW_USAGE, "%s holds numeric ids; say with --names FILE what they stand for",
                            windrow_dump_file_name(dump, dump->file));
    return WINDROW_OK;
}

static enum windrow_status file_open(struct windrow_dump *dump)
{
    dump->stream_ended = false;
    dump->bytes = dump->line = 0;
    dump->pending.bytes = dump->pending_at = 0;
    dump->within_line = false;
    XXH3_64bits_reset(dump->hash);
    enum windrow_status status = windrow_stream_open(dump->paths[dump->file], &dump->consumed_bytes, &dump->stream);
    return status == WINDROW_OK ? shape_find(dump) : status;
}

static void file_close(struct windrow_dump *dump)
{
    windrow_stream_close(dump->stream);
    dump->stream = NULL;
    dump->file++;
    dump->bytes = dump->line = 0;
    dump->pending.bytes = dump->pending_at = 0;
    dump->within_line = false;
    XXH3_64bits_reset(dump->hash);
}

/* Appends to a field that began at field_start of the buffer, up to what is kept of a field. */
static enum windrow_status field_append(struct windrow_buffer *buffer, size_t field_start, const char *text, size_t bytes)
{
    size_t kept = buffer->bytes - field_start, most = WINDROW_DUMP_FIELD_BYTES_MAX + 1;
    if (bytes > most - kept)
        bytes = most - kept;
    return windrow_buffer_append(buffer, text, bytes);
}

static bool is_blank(char byte)
{
    return byte == ' ' || (byte >= '\t' && byte <= '\r');
}

/* The next end of a field: a TAB, or among ids any white space; NULL when there is none. */
static const char *field_end(const struct windrow_dump *dump, const char *at, const char *end)
{
    if (dump->shape != WINDROW_DUMP_IDS)
        return memchr(at, '\t', (size_t)(end - at));
    while (at < end && !is_blank(*at))
        at++;
    return at < end ? at : NULL;
}

/* Reads the file again up to the position, and checks that it is the same. */
static enum windrow_status file_skip(struct windrow_dump *dump, const struct windrow_dump_position *position)
{
    bool source_ended = false;
    char last = '\n';
    enum windrow_status status = WINDROW_OK;
    dump->source.bytes = 0;
    while (dump->bytes < position->bytes) {
        status = pending_fill(dump);
        if (status != WINDROW_OK)
            return status;
        size_t bytes = pending_left(dump);
        if (bytes == 0)
            break;
        if (bytes > position->bytes - dump->bytes)
            bytes = (size_t)(position->bytes - dump->bytes);
        const char *text = pending_text(dump), *end = text + bytes;
        /* The source of the line in which the position may lie. */
        const char *newline = memrchr(text, '\n', bytes), *start = text;
        if (newline != NULL) {
            dump->source.bytes = 0;
            source_ended = false;
            start = newline + 1;
        }
        while (!source_ended && dump->shape == WINDROW_DUMP_IDS && !dump->source.bytes && start < end && is_blank(*start))
            start++;
        if (!source_ended) {
            const char *tab = field_end(dump, start, end);
            source_ended = tab != NULL;
            status = field_append(&dump->source, 0, start, (size_t)((tab != NULL ? tab : end) - start));
            if (status != WINDROW_OK)
                return status;
        }
        last = end[-1];
        pass(dump, text, bytes);
        dump->pending_at += bytes;
    }
    if (dump->bytes < position->bytes || XXH3_64bits_digest(dump->hash) != position->hash)
        return windrow_fail(WINDROW_INPUT,
                            "%s is not the same stream as when this job began: it differs within its first %" PRIu64
                            " bytes; feed the same dumps in the same order, or begin a new job",
                            windrow_dump_file_name(dump, dump->file), position->bytes);
    dump->line = position->line;
    dump->within_line = last != '\n';
    return dump->within_line ? windrow_buffer_append(&dump->source, "\t", 1) : WINDROW_OK;
}

/* Looks at all files: that they are there, and how long they are. */
static enum windrow_status paths_check(struct windrow_dump *dump)
{
    bool pipe = false, standard_input = false;
    for (size_t i = 0; i < dump->path_count; i++) {
        const char *path = dump->paths[i];
        struct stat status;
        bool is_standard_input = strcmp(path, "-") == 0;
        if (is_standard_input && standard_input)
            return windrow_fail(WINDROW_USAGE, "standard input (-) is named twice among the dumps");
        standard_input = standard_input || is_standard_input;
        if ((is_standard_input ? fstat(STDIN_FILENO, &status) : stat(path, &status)) != 0)
            return windrow_fail_system(WINDROW_INPUT, errno, "cannot open the dump %s", path);
        if (S_ISDIR(status.st_mode))
            return windrow_fail(WINDROW_INPUT, "the dump %s is a directory; name its files", path);
        pipe = pipe || !S_ISREG(status.st_mode);
        dump->total_bytes += (uint64_t)status.st_size;
        if (i < dump->file && S_ISREG(status.st_mode))
            dump->consumed_bytes += (uint64_t)status.st_size;
    }
    if (pipe)
        dump->total_bytes = 0;
    return WINDROW_OK;
}

enum windrow_status windrow_dump_open(const struct windrow_dump_options *options,
                                      const struct windrow_dump_position *resume, struct windrow_dump **out)
{
    *out = NULL;
    if (options->path_count == 0)
        return windrow_fail(WINDROW_USAGE, "no dump is named; name files, or - for standard input");
    if (options->shape == WINDROW_DUMP_IDS && !options->with_ids)
        return windrow_fail(WINDROW_USAGE, "dumps of shape ids need their names; say with --names FILE what the ids stand for");
    if (resume != NULL && resume->file > options->path_count)
        return windrow_fail(WINDROW_INPUT, "this job began with more dumps than the %zu named now; name the same ones",
                            options->path_count);
    struct windrow_dump *dump = calloc(1, sizeof *dump);
    if (dump == NULL)
        return windrow_fail(WINDROW_RESOURCE, "no memory to read dumps");
    dump->paths = options->paths;
    dump->path_count = options->path_count;
    dump->forced_shape = options->shape;
    dump->with_ids = options->with_ids;
    dump->chunk_bytes = options->chunk_bytes != 0 ? options->chunk_bytes : WINDROW_DUMP_CHUNK_BYTES;
    dump->file = resume != NULL ? (size_t)resume->file : 0;
    dump->hash = XXH3_createState();
    enum windrow_status status =
        dump->hash != NULL ? paths_check(dump) : windrow_fail(WINDROW_RESOURCE, "no memory to read dumps");
    if (status == WINDROW_OK)
        XXH3_64bits_reset(dump->hash);
    if (status == WINDROW_OK && resume != NULL && resume->bytes > 0) {
        status = dump->file < dump->path_count
                     ? file_open(dump)
                     : windrow_fail(WINDROW_INPUT, "this job began with more dumps than the %zu named now; name the same ones",
                                    dump->path_count);
        if (status == WINDROW_OK)
            status = file_skip(dump, resume);
    }
    if (status != WINDROW_OK)
        windrow_dump_close(dump);
    else
        *out = dump;
    return status;
}

/* Hands the chunk's text out of the buffer that it was borrowed into, with all that is to be said about it. */
static void chunk_finish(const struct windrow_dump *dump, struct windrow_dump_chunk *chunk, struct windrow_buffer *text)
{
    chunk->text = (char *)text->data;
    chunk->bytes = text->bytes;
    chunk->capacity_bytes = text->capacity_bytes;
    chunk->shape = dump->shape;
    chunk->end = (struct windrow_dump_position){dump->file, dump->bytes, dump->line, XXH3_64bits_digest(dump->hash)};
}

/* What the pieces of a long line know while they are put together. */
struct piece {
    struct windrow_buffer *text;
    size_t field_start; /* of the field that is being read, in the text */
    size_t fields;      /* that are kept, source included */
};

static bool blank(const uint8_t *text, size_t bytes)
{
    for (size_t i = 0; i < bytes; i++)
        if (!is_blank((char)text[i]))
            return false;
    return true;
}

/* Ends a field at its TAB: blank targets are forgotten, so that no piece is without a target (and among ids, where white space is no field,
 * blank sources). */
static enum windrow_status piece_field_end(struct piece *piece, bool ids)
{
    struct windrow_buffer *text = piece->text;
    size_t field_bytes = text->bytes - piece->field_start;
    if ((piece->fields > 0 || ids) && field_bytes <= WINDROW_DUMP_FIELD_BYTES_MAX &&
        blank(text->data + piece->field_start, field_bytes)) {
        text->bytes = piece->field_start;
        return WINDROW_OK;
    }
    enum windrow_status status = windrow_buffer_append(text, "\t", 1);
    piece->fields++;
    piece->field_start = text->bytes;
    return status;
}

/* Reads a piece of a long line of a list: to the line's end, or to a TAB where the chunk is full. */
static enum windrow_status list_piece_read(struct windrow_dump *dump, struct windrow_buffer *text)
{
    struct piece piece = {.text = text};
    enum windrow_status status = WINDROW_OK;
    if (dump->within_line) {
        status = windrow_buffer_append(text, dump->source.data, dump->source.bytes);
        piece.field_start = text->bytes;
        piece.fields = 1;
    }
    while (status == WINDROW_OK) {
        status = pending_fill(dump);
        if (status != WINDROW_OK)
            return status;
        const char *start = pending_text(dump), *at = start;
        size_t bytes = pending_left(dump);
        const char *newline = bytes > 0 ? memchr(start, '\n', bytes) : NULL;
        const char *end = newline != NULL ? newline : start + bytes;
        bool full = false;
        while (status == WINDROW_OK && at < end && !full) {
            const char *tab = field_end(dump, at, end);
            status = field_append(text, piece.field_start, at, (size_t)((tab != NULL ? tab : end) - at));
            at = tab != NULL ? tab + 1 : end;
            if (tab != NULL && status == WINDROW_OK) {
                bool source = piece.fields == 0;
                status = piece_field_end(&piece, dump->shape == WINDROW_DUMP_IDS);
                if (source && piece.fields == 1 && status == WINDROW_OK) {
                    dump->source.bytes = 0;
                    status = windrow_buffer_append(&dump->source, text->data, text->bytes);
                }
                full = piece.fields > 1 && text->bytes >= dump->chunk_bytes;
            }
        }
        if (status != WINDROW_OK)
            return status;
        bool line_ends = !full && (newline != NULL || bytes == 0);
        if (!full && newline != NULL) {
            at = newline + 1;
            dump->line++;
        }
        pass(dump, start, (size_t)(at - start));
        dump->pending_at += (size_t)(at - start);
        if (full || line_ends) {
            dump->within_line = full;
            return windrow_buffer_append(text, "\n", 1);
        }
    }
    return status;
}

/* Reads a long line of pairs, as much of it as can be a pair; the rest is dropped. */
static enum windrow_status pair_line_read(struct windrow_dump *dump, struct windrow_buffer *text)
{
    for (;;) {
        enum windrow_status status = pending_fill(dump);
        if (status != WINDROW_OK)
            return status;
        const char *start = pending_text(dump);
        size_t bytes = pending_left(dump), most = WINDROW_DUMP_PAIR_BYTES_MAX + 1 - text->bytes;
        const char *newline = bytes > 0 ? memchr(start, '\n', bytes) : NULL;
        size_t used = newline != NULL ? (size_t)(newline - start) : bytes;
        status = windrow_buffer_append(text, start, used < most ? used : most);
        if (status != WINDROW_OK)
            return status;
        if (newline != NULL) {
            used++;
            dump->line++;
        }
        pass(dump, start, used);
        dump->pending_at += used;
        if (newline != NULL || bytes == 0)
            return windrow_buffer_append(text, "\n", 1);
    }
}

/* Fills the chunk with whole lines; leaves it empty, and all of it pending, when there is no line's end within a chunk. */
static enum windrow_status lines_read(struct windrow_dump *dump, struct windrow_buffer *text)
{
    enum windrow_status status = windrow_buffer_reserve(text, dump->chunk_bytes);
    size_t from_pending = pending_left(dump) < dump->chunk_bytes ? pending_left(dump) : dump->chunk_bytes;
    if (status == WINDROW_OK && from_pending > 0)
        status = windrow_buffer_append(text, pending_text(dump), from_pending);
    while (status == WINDROW_OK && text->bytes < dump->chunk_bytes && !dump->stream_ended) {
        size_t got;
        status = windrow_stream_read(dump->stream, (char *)text->data + text->bytes, dump->chunk_bytes - text->bytes, &got);
        if (status == WINDROW_OK) {
            text->bytes += got;
            dump->stream_ended = got == 0;
        }
    }
    if (status != WINDROW_OK)
        return status;
    bool all = dump->stream_ended && from_pending == pending_left(dump);
    const char *newline = text->bytes > 0 ? memrchr(text->data, '\n', text->bytes) : NULL;
    size_t cut = all ? text->bytes : newline != NULL ? (size_t)((const uint8_t *)newline - text->data) + 1 : 0;
    pass(dump, (const char *)text->data, cut);
    if (cut <= from_pending) {
        /* What came from the stream, if anything, joins what is still pending. */
        dump->pending_at += cut;
        if (text->bytes > from_pending)
            status = windrow_buffer_append(&dump->pending, text->data + from_pending, text->bytes - from_pending);
    } else {
        dump->pending.bytes = dump->pending_at = 0;
        status = windrow_buffer_append(&dump->pending, text->data + cut, text->bytes - cut);
    }
    text->bytes = cut;
    return status;
}

/* Sixteen bytes at a time, in the compiler's portable vectors: every byte of a chunk passes here. */
typedef uint8_t bytes16 __attribute__((vector_size(16)));

static uint64_t newlines_count(const uint8_t *text, size_t bytes)
{
    uint64_t count = 0;
    size_t at = 0;
    while (bytes - at >= 16) {
        /* A lane counts up to 255 before it has to be emptied. */
        size_t stop = bytes - at < 255 * 16 ? at + (bytes - at) / 16 * 16 : at + 255 * 16;
        bytes16 lanes = {0};
        for (; at < stop; at += 16) {
            bytes16 here;
            memcpy(&here, text + at, sizeof here);
            lanes -= (bytes16)(here == '\n');
        }
        for (int i = 0; i < 16; i++)
            count += lanes[i];
    }
    for (; at < bytes; at++)
        count += text[at] == '\n';
    return count;
}

static enum windrow_status next_read(struct windrow_dump *dump, struct windrow_dump_chunk *chunk, struct windrow_buffer *text)
{
    enum windrow_status status = WINDROW_OK;
    if (dump->stream == NULL)
        status = file_open(dump);
    if (status != WINDROW_OK)
        return status;
    chunk->file = dump->file;
    chunk->first_line = dump->line + 1;
    chunk->continued = dump->within_line;
    if (!dump->within_line) {
        status = lines_read(dump, text);
        if (status != WINDROW_OK)
            return status;
        dump->line += newlines_count(text->data, text->bytes);
    }
    if (text->bytes == 0 && (pending_left(dump) > 0 || !dump->stream_ended))
        status = dump->shape == WINDROW_DUMP_PAIRS ? pair_line_read(dump, text) : list_piece_read(dump, text);
    return status;
}

enum windrow_status windrow_dump_read(struct windrow_dump *dump, struct windrow_dump_chunk *chunk)
{
    struct windrow_buffer text = {(uint8_t *)chunk->text, 0, chunk->capacity_bytes};
    enum windrow_status status = WINDROW_OK;
    while (status == WINDROW_OK && text.bytes == 0 && dump->file < dump->path_count) {
        status = next_read(dump, chunk, &text);
        if (status == WINDROW_OK && dump->stream_ended && pending_left(dump) == 0)
            file_close(dump);
    }
    if (status != WINDROW_OK)
        text.bytes = 0;
    chunk_finish(dump, chunk, &text);
    return status;
}

void windrow_dump_close(struct windrow_dump *dump)
{
    if (dump == NULL)
        return;
    windrow_stream_close(dump->stream);
    windrow_buffer_free(&dump->pending);
    windrow_buffer_free(&dump->source);
    if (dump->hash != NULL)
        XXH3_freeState(dump->hash);
    free(dump);
}
