#include "store/pages.h"

#include "base/varint.h"
#include "url/key.h"

#include <stdlib.h>
#include <string.h>

/* A frame's contents before compression:
 *
 *   offset  size  what
 *   0       4     number of keys
 *   4       4     bytes of the shared lengths (varints)
 *   8       4     bytes of the rests' lengths (varints)
 *   12      4     bytes of the rests
 *   16            shared lengths, lengths, rests; then, in a table with numbers, a varint for each key
 *
 * The first key of a frame shares nothing. */
#define HEAD_BYTES 16
#define LEVEL 7 /* measured in DEVELOPERS.md: beyond it, time grows and size hardly falls */
#define RAW_BYTES_MOST (WINDROW_PAGES_FRAME_BYTES + WINDROW_KEY_BYTES_MAX + WINDROW_PAGES_FRAME_KEYS * 3 * WINDROW_VARINT_BYTES_MAX + HEAD_BYTES)

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory for the page table");
}

enum windrow_status windrow_pages_writer_open(struct windrow_pages_writer *pages, const char *path, uint64_t first_entry, bool with_numbers)
{
    *pages = (struct windrow_pages_writer){.file.descriptor = -1, .next_entry = first_entry, .with_numbers = with_numbers};
    pages->compressor = ZSTD_createCCtx();
    if (!pages->compressor)
        return memory();
    ZSTD_CCtx_setParameter(pages->compressor, ZSTD_c_compressionLevel, LEVEL);
    ZSTD_CCtx_setParameter(pages->compressor, ZSTD_c_checksumFlag, 1);
    enum windrow_status status = windrow_writer_open(&pages->file, path, true);
    if (status)
        windrow_pages_writer_free(pages);
    return status;
}

static enum windrow_status put_varint(struct windrow_buffer *buffer, uint64_t value)
{
    enum windrow_status status = windrow_buffer_reserve(buffer, WINDROW_VARINT_BYTES_MAX);
    if (!status)
        buffer->bytes = (size_t)(windrow_varint_put(buffer->data + buffer->bytes, value) - buffer->data);
    return status;
}

static enum windrow_status cut(struct windrow_pages_writer *pages)
{
    if (!pages->frame_keys)
        return WINDROW_OK;
    enum windrow_status status;
    uint32_t head[4] = {pages->frame_keys, (uint32_t)pages->shared.bytes, (uint32_t)pages->lengths.bytes, (uint32_t)pages->rests.bytes};
    pages->frame.bytes = pages->compressed.bytes = 0;
    const struct windrow_buffer *sections[] = {&pages->shared, &pages->lengths, &pages->rests, &pages->numbers};
    if ((status = windrow_buffer_append(&pages->frame, head, sizeof head)))
        return status;
    for (int section = 0; section < 4; section++)
        if ((status = windrow_buffer_append(&pages->frame, sections[section]->data, sections[section]->bytes)))
            return status;
    size_t bound = ZSTD_compressBound(pages->frame.bytes);
    if ((status = windrow_buffer_reserve(&pages->compressed, bound)))
        return status;
    size_t bytes = ZSTD_compress2(pages->compressor, pages->compressed.data, bound, pages->frame.data, pages->frame.bytes);
    if (ZSTD_isError(bytes))
        return windrow_fail(WINDROW_RESOURCE, "cannot compress the page table: %s", ZSTD_getErrorName(bytes));
    pages->frame_keys = 0;
    pages->frame_key_bytes = 0;
    pages->shared.bytes = pages->lengths.bytes = pages->rests.bytes = pages->numbers.bytes = 0;
    return windrow_writer_append(&pages->file, pages->compressed.data, bytes);
}

enum windrow_status windrow_pages_put(struct windrow_pages_writer *pages, const uint8_t *key, size_t key_bytes, size_t shared, uint64_t number)
{
    enum windrow_status status;
    if (pages->frame_keys == WINDROW_PAGES_FRAME_KEYS || (pages->frame_keys && pages->frame_key_bytes + key_bytes > WINDROW_PAGES_FRAME_BYTES))
        if ((status = cut(pages)))
            return status;
    if (!pages->frame_keys) {
        struct windrow_pages_mark mark = {pages->next_entry, pages->file.written_bytes, pages->first_keys.bytes};
        if ((status = windrow_buffer_append(&pages->marks, &mark, sizeof mark)) ||
            (status = windrow_buffer_append(&pages->first_keys, key, key_bytes)))
            return status;
        shared = 0;
    }
    if ((status = put_varint(&pages->shared, shared)) || (status = put_varint(&pages->lengths, key_bytes - shared)) ||
        (status = windrow_buffer_append(&pages->rests, key + shared, key_bytes - shared)))
        return status;
    if (pages->with_numbers && (status = put_varint(&pages->numbers, number)))
        return status;
    pages->frame_keys++;
    pages->frame_key_bytes += key_bytes;
    pages->next_entry++;
    return WINDROW_OK;
}

enum windrow_status windrow_pages_writer_finish(struct windrow_pages_writer *pages, uint64_t *bytes, uint64_t *checksum)
{
    enum windrow_status status = cut(pages);
    *bytes = pages->file.written_bytes;
    return status ? status : windrow_writer_finish(&pages->file, checksum);
}

void windrow_pages_writer_free(struct windrow_pages_writer *pages)
{
    windrow_writer_abandon(&pages->file);
    ZSTD_freeCCtx(pages->compressor);
    windrow_buffer_free(&pages->shared);
    windrow_buffer_free(&pages->lengths);
    windrow_buffer_free(&pages->rests);
    windrow_buffer_free(&pages->numbers);
    windrow_buffer_free(&pages->frame);
    windrow_buffer_free(&pages->compressed);
    windrow_buffer_free(&pages->marks);
    windrow_buffer_free(&pages->first_keys);
    pages->compressor = NULL;
}

enum windrow_status windrow_pages_index_open(const struct windrow_map *marks, const struct windrow_map *keys, uint64_t entries,
                                             struct windrow_pages_index *index)
{
    uint64_t count = marks->bytes / sizeof(struct windrow_pages_mark);
    *index = (struct windrow_pages_index){(const struct windrow_pages_mark *)marks->data, count - 1, keys->data, keys->bytes};
    bool good = count >= 1 && marks->bytes == count * sizeof(struct windrow_pages_mark) && index->marks[count - 1].first_entry == entries &&
                index->marks[count - 1].key_at == keys->bytes && (entries == 0) == (count == 1) && index->marks[0].first_entry == 0 &&
                index->marks[0].key_at == 0;
    for (uint64_t frame = 0; good && frame + 1 < count; frame++) {
        const struct windrow_pages_mark *mark = &index->marks[frame];
        good = mark[1].first_entry > mark[0].first_entry && mark[1].first_entry - mark[0].first_entry <= WINDROW_PAGES_FRAME_KEYS &&
               mark[1].key_at > mark[0].key_at;
    }
    if (!good)
        return windrow_fail(WINDROW_DAMAGED, "the page index contradicts itself; shard the dumps again");
    return WINDROW_OK;
}

uint64_t windrow_pages_frame_of_entry(const struct windrow_pages_index *index, uint64_t entry)
{
    uint64_t low = 0, high = index->frame_count;
    while (high - low > 1) {
        uint64_t middle = low + (high - low) / 2;
        if (index->marks[middle].first_entry <= entry)
            low = middle;
        else
            high = middle;
    }
    return low;
}

uint64_t windrow_pages_frame_of_key(const struct windrow_pages_index *index, const uint8_t *key, size_t key_bytes)
{
    uint64_t low = 0, high = index->frame_count;
    while (high - low > 1) {
        uint64_t middle = low + (high - low) / 2;
        const struct windrow_pages_mark *mark = &index->marks[middle];
        if (windrow_key_compare((const char *)index->keys + mark->key_at, (size_t)(mark[1].key_at - mark->key_at), (const char *)key, key_bytes) <= 0)
            low = middle;
        else
            high = middle;
    }
    return low;
}

static enum windrow_status damaged(const char *path, uint64_t offset)
{
    return windrow_fail(WINDROW_DAMAGED, "the frame at byte %llu of %s is damaged; shard the dumps again", (unsigned long long)offset, path);
}

static enum windrow_status load_frame(const struct windrow_pages_index *index, uint64_t frame, int descriptor, const char *path,
                                      struct windrow_pages_frame *out)
{
    uint64_t offset = index->marks[frame].file_offset;
    enum windrow_status status;
    if (!out->decompressor && !(out->decompressor = ZSTD_createDCtx()))
        return memory();
    /* The frame's own header tells its size; it is read with a guess, and again when the guess was short. */
    uint8_t head[18];
    ssize_t got = windrow_files.read_at(descriptor, head, sizeof head, (off_t)offset);
    if (got < 9)
        return damaged(path, offset);
    unsigned long long raw_bytes = ZSTD_getFrameContentSize(head, (size_t)got);
    if (raw_bytes == ZSTD_CONTENTSIZE_UNKNOWN || raw_bytes == ZSTD_CONTENTSIZE_ERROR || raw_bytes < HEAD_BYTES || raw_bytes > RAW_BYTES_MOST)
        return damaged(path, offset);
    size_t bound = ZSTD_compressBound((size_t)raw_bytes);
    out->compressed.bytes = out->raw.bytes = 0;
    if ((status = windrow_buffer_reserve(&out->compressed, bound)) || (status = windrow_buffer_reserve(&out->raw, (size_t)raw_bytes)))
        return status;
    size_t have = 0;
    while (have < bound) {
        got = windrow_files.read_at(descriptor, out->compressed.data + have, bound - have, (off_t)(offset + have));
        if (got <= 0)
            break;
        have += (size_t)got;
    }
    size_t frame_bytes = ZSTD_findFrameCompressedSize(out->compressed.data, have);
    if (ZSTD_isError(frame_bytes))
        return damaged(path, offset);
    size_t bytes = ZSTD_decompressDCtx(out->decompressor, out->raw.data, (size_t)raw_bytes, out->compressed.data, frame_bytes);
    if (ZSTD_isError(bytes) || bytes != raw_bytes)
        return damaged(path, offset);
    out->raw.bytes = bytes;
    return WINDROW_OK;
}

enum windrow_status windrow_pages_frame_read(const struct windrow_pages_index *index, uint64_t frame, int descriptor, const char *path,
                                             bool with_numbers, struct windrow_pages_frame *out)
{
    const struct windrow_pages_mark *mark = &index->marks[frame];
    out->key_count = 0;
    enum windrow_status status = load_frame(index, frame, descriptor, path, out);
    if (status)
        return status;
    uint32_t head[4];
    memcpy(head, out->raw.data, sizeof head);
    uint32_t count = head[0];
    const uint8_t *at = out->raw.data + HEAD_BYTES, *end = out->raw.data + out->raw.bytes;
    if (count != mark[1].first_entry - mark->first_entry || (uint64_t)head[1] + head[2] + head[3] > (uint64_t)(end - at))
        return damaged(path, mark->file_offset);
    const uint8_t *shared_at = at, *shared_end = at + head[1];
    const uint8_t *length_at = shared_end, *length_end = shared_end + head[2];
    const uint8_t *rest_at = length_end, *rest_end = length_end + head[3];
    const uint8_t *number_at = rest_end;
    if (!out->key_at)
        out->key_at = malloc((WINDROW_PAGES_FRAME_KEYS + 1) * sizeof *out->key_at);
    if (with_numbers && !out->numbers)
        out->numbers = malloc(WINDROW_PAGES_FRAME_KEYS * sizeof *out->numbers);
    if (!out->key_at || (with_numbers && !out->numbers))
        return memory();
    out->keys.bytes = 0;
    size_t before = 0, before_bytes = 0;
    for (uint32_t key = 0; key < count; key++) {
        uint64_t shared = 0, length = 0, number = 0;
        shared_at = windrow_varint_get(shared_at, shared_end, &shared);
        length_at = windrow_varint_get(length_at, length_end, &length);
        if (!shared_at || !length_at || shared > before_bytes || length > (uint64_t)(rest_end - rest_at) || shared + length > WINDROW_KEY_BYTES_MAX ||
            shared + length == 0 || out->keys.bytes + shared + length > WINDROW_PAGES_FRAME_BYTES)
            return damaged(path, mark->file_offset);
        if (with_numbers) {
            number_at = windrow_varint_get(number_at, end, &number);
            if (!number_at)
                return damaged(path, mark->file_offset);
            out->numbers[key] = number;
        }
        if ((status = windrow_buffer_reserve(&out->keys, (size_t)(shared + length))))
            return status;
        size_t here = out->keys.bytes;
        memcpy(out->keys.data + here, out->keys.data + before, (size_t)shared);
        memcpy(out->keys.data + here + shared, rest_at, (size_t)length);
        rest_at += length;
        out->keys.bytes += (size_t)(shared + length);
        if (key && windrow_key_compare((char *)out->keys.data + before, before_bytes, (char *)out->keys.data + here, (size_t)(shared + length)) >= 0)
            return damaged(path, mark->file_offset);
        out->key_at[key] = (uint32_t)here;
        before = here;
        before_bytes = (size_t)(shared + length);
    }
    out->key_at[count] = (uint32_t)out->keys.bytes;
    if (shared_at != shared_end || length_at != length_end || rest_at != rest_end || number_at != end ||
        out->key_at[1] != mark[1].key_at - mark->key_at || memcmp(out->keys.data, index->keys + mark->key_at, out->key_at[1]) != 0)
        return damaged(path, mark->file_offset);
    out->first_entry = mark->first_entry;
    out->key_count = count;
    return WINDROW_OK;
}

void windrow_pages_frame_free(struct windrow_pages_frame *frame)
{
    free(frame->key_at);
    free(frame->numbers);
    windrow_buffer_free(&frame->keys);
    windrow_buffer_free(&frame->compressed);
    windrow_buffer_free(&frame->raw);
    ZSTD_freeDCtx(frame->decompressor);
    *frame = (struct windrow_pages_frame){0};
}

bool windrow_pages_frame_find(const struct windrow_pages_frame *frame, const uint8_t *key, size_t key_bytes, uint32_t *position)
{
    uint32_t low = 0, high = frame->key_count;
    while (low < high) {
        uint32_t middle = low + (high - low) / 2;
        int order = windrow_key_compare((const char *)frame->keys.data + frame->key_at[middle], frame->key_at[middle + 1] - frame->key_at[middle],
                                        (const char *)key, key_bytes);
        if (order == 0) {
            *position = middle;
            return true;
        }
        if (order < 0)
            low = middle + 1;
        else
            high = middle;
    }
    return false;
}
