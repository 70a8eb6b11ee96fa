#include "shard/keyrun.h"

#include "base/varint.h"
#include "shard/sealed.h"
#include "url/key.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum windrow_status windrow_keyrun_writer_open(struct windrow_keyrun_writer *run, const char *path)
{
    *run = (struct windrow_keyrun_writer){.frames.writer.descriptor = -1};
    if (asprintf(&run->index_path, "%s.index", path) < 0) {
        run->index_path = NULL;
        return windrow_fail(WINDROW_RESOURCE, "out of memory while creating %s", path);
    }
    enum windrow_status status = windrow_frames_writer_open(&run->frames, path);
    if (status)
        windrow_keyrun_writer_abandon(run);
    return status;
}

static enum windrow_status mark(struct windrow_keyrun_writer *run, const uint8_t *key, size_t key_bytes)
{
    enum windrow_status status = windrow_buffer_reserve(&run->index, 3 * WINDROW_VARINT_BYTES_MAX);
    if (status)
        return status;
    uint8_t *out = run->index.data + run->index.bytes;
    out = windrow_varint_put(out, windrow_frames_offset(&run->frames));
    out = windrow_varint_put(out, run->entries);
    out = windrow_varint_put(out, key_bytes);
    run->index.bytes = (size_t)(out - run->index.data);
    return windrow_buffer_append(&run->index, key, key_bytes);
}

enum windrow_status windrow_keyrun_put(struct windrow_keyrun_writer *run, const uint8_t *key, size_t key_bytes, size_t shared,
                                       uint64_t degree, bool crawled)
{
    enum windrow_status status;
    if (!run->frames.raw.bytes) {
        if ((status = mark(run, key, key_bytes)))
            return status;
        shared = 0;
    }
    struct windrow_buffer *raw = &run->frames.raw;
    if ((status = windrow_buffer_reserve(raw, key_bytes + 3 * WINDROW_VARINT_BYTES_MAX)))
        return status;
    uint8_t *out = raw->data + raw->bytes;
    out = windrow_varint_put(out, shared);
    out = windrow_varint_put(out, key_bytes - shared);
    memcpy(out, key + shared, key_bytes - shared);
    out = windrow_varint_put(out + (key_bytes - shared), degree * 2 + crawled);
    raw->bytes = (size_t)(out - raw->data);
    run->entries++;
    return windrow_frames_fill(&run->frames, NULL);
}

enum windrow_status windrow_keyrun_writer_finish(struct windrow_keyrun_writer *run)
{
    struct windrow_writer writer = {.descriptor = -1};
    enum windrow_status status = windrow_frames_writer_finish(&run->frames);
    if (!status)
        status = windrow_writer_open(&writer, run->index_path, true);
    if (!status)
        status = windrow_writer_append(&writer, run->index.data, run->index.bytes);
    if (!status)
        status = windrow_writer_seal(&writer);
    if (!status)
        status = windrow_writer_finish(&writer, NULL);
    windrow_writer_abandon(&writer);
    windrow_keyrun_writer_abandon(run);
    return status;
}

void windrow_keyrun_writer_abandon(struct windrow_keyrun_writer *run)
{
    windrow_frames_writer_abandon(&run->frames);
    windrow_buffer_free(&run->index);
    free(run->index_path);
    run->index_path = NULL;
}

enum windrow_status windrow_keyrun_index_load(const char *run_path, struct windrow_keyrun_index *index)
{
    *index = (struct windrow_keyrun_index){0};
    char *path = NULL;
    if (asprintf(&path, "%s.index", run_path) < 0)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while opening %s", run_path);
    enum windrow_status status = windrow_sealed_load(path, &index->bytes);
    const uint8_t *at = index->bytes.data, *end = at + index->bytes.bytes;
    size_t capacity = 0;
    while (!status && at < end) {
        uint64_t offset, entry, key_bytes = 0;
        at = windrow_varint_get(at, end, &offset);
        at = at ? windrow_varint_get(at, end, &entry) : NULL;
        at = at ? windrow_varint_get(at, end, &key_bytes) : NULL;
        if (!at || key_bytes > (uint64_t)(end - at)) {
            status = windrow_fail(WINDROW_DAMAGED, "the scratch file %s is damaged; remove the unfinished store and shard again", path);
            break;
        }
        if (index->mark_count == capacity) {
            capacity = capacity ? 2 * capacity : 64;
            struct windrow_keyrun_mark *marks = realloc(index->marks, capacity * sizeof *marks);
            if (!marks) {
                status = windrow_fail(WINDROW_RESOURCE, "out of memory while reading %s", path);
                break;
            }
            index->marks = marks;
        }
        index->marks[index->mark_count++] = (struct windrow_keyrun_mark){offset, entry, at, (size_t)key_bytes};
        at += key_bytes;
    }
    free(path);
    if (status)
        windrow_keyrun_index_free(index);
    return status;
}

void windrow_keyrun_index_free(struct windrow_keyrun_index *index)
{
    windrow_buffer_free(&index->bytes);
    free(index->marks);
    *index = (struct windrow_keyrun_index){0};
}

enum windrow_status windrow_keyrun_reader_open(struct windrow_keyrun_reader *run, const char *path)
{
    *run = (struct windrow_keyrun_reader){.ended = true};
    return windrow_frames_reader_open(&run->frames, path);
}

void windrow_keyrun_seek(struct windrow_keyrun_reader *run, const struct windrow_keyrun_mark *mark)
{
    windrow_frames_seek(&run->frames, mark->offset);
    run->at = NULL;
    run->key.bytes = 0;
    run->next_entry = mark->first_entry;
}

enum windrow_status windrow_keyrun_next(struct windrow_keyrun_reader *run)
{
    enum windrow_status status;
    const uint8_t *end = run->frames.raw.data + run->frames.raw.bytes;
    bool first = false;
    run->ended = false;
    if (!run->at || run->at == end) {
        if ((status = windrow_frames_next(&run->frames)))
            return status;
        if (!run->frames.raw.bytes) {
            run->ended = true;
            return WINDROW_OK;
        }
        run->at = run->frames.raw.data;
        end = run->at + run->frames.raw.bytes;
        first = true;
    }
    uint64_t shared, rest = 0, facts;
    const uint8_t *at = windrow_varint_get(run->at, end, &shared);
    at = at ? windrow_varint_get(at, end, &rest) : NULL;
    if (!at || shared > run->key.bytes || rest > (uint64_t)(end - at) || shared + rest > WINDROW_KEY_BYTES_MAX || (first && shared))
        return windrow_frames_damaged(&run->frames);
    if (run->key.capacity_bytes < shared + rest) {
        if ((status = windrow_buffer_reserve(&run->key, (size_t)(shared + rest))))
            return status;
    }
    if (first) {
        /* The frame spells its first key out; what it shares with the last key of the frame before is found again. */
        size_t common = windrow_keyrun_shared(run->key.data, run->key.bytes, at, (size_t)rest, 0);
        run->shared = common;
    } else {
        run->shared = (size_t)shared;
    }
    memcpy(run->key.data + shared, at, (size_t)rest);
    run->key.bytes = (size_t)(shared + rest);
    at = windrow_varint_get(at + rest, end, &facts);
    if (!at)
        return windrow_frames_damaged(&run->frames);
    run->degree = facts >> 1;
    run->crawled = facts & 1;
    run->entry = run->next_entry++;
    run->at = at;
    return WINDROW_OK;
}

void windrow_keyrun_reader_close(struct windrow_keyrun_reader *run)
{
    windrow_frames_reader_close(&run->frames);
    windrow_buffer_free(&run->key);
    *run = (struct windrow_keyrun_reader){.frames.descriptor = -1, .ended = true};
}

int windrow_keyrun_compare(const uint8_t *a, size_t a_bytes, const uint8_t *b, size_t b_bytes)
{
    return windrow_key_compare((const char *)a, a_bytes, (const char *)b, b_bytes);
}

size_t windrow_keyrun_shared(const uint8_t *a, size_t a_bytes, const uint8_t *b, size_t b_bytes, size_t from)
{
    size_t most = a_bytes < b_bytes ? a_bytes : b_bytes, at = from;
    while (at + 8 <= most) {
        uint64_t left, right;
        memcpy(&left, a + at, 8);
        memcpy(&right, b + at, 8);
        if (left != right)
            return at + (size_t)(__builtin_ctzll(left ^ right) >> 3);
        at += 8;
    }
    while (at < most && a[at] == b[at])
        at++;
    return at;
}
