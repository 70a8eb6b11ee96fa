#include "shard/records.h"

#include "base/varint.h"
#include "shard/keyrun.h"

#include <string.h>

int windrow_record_compare(const struct windrow_record *a, const struct windrow_record *b)
{
    int order = windrow_keyrun_compare(a->key, a->key_bytes, b->key, b->key_bytes);
    return order ? order : windrow_keyrun_compare(a->value, a->value_bytes, b->value, b->value_bytes);
}

enum windrow_status windrow_records_writer_open(struct windrow_records_writer *records, const char *path)
{
    *records = (struct windrow_records_writer){.frames.writer.descriptor = -1};
    return windrow_frames_writer_open(&records->frames, path);
}

enum windrow_status windrow_records_put(struct windrow_records_writer *records, const struct windrow_record *record)
{
    enum windrow_status status;
    if (record->key_bytes > WINDROW_RECORD_BYTES_MAX || record->value_bytes > WINDROW_RECORD_BYTES_MAX)
        return windrow_fail(WINDROW_BUG, "a scratch record of %zu and %zu bytes", record->key_bytes, record->value_bytes);
    struct windrow_buffer *raw = &records->frames.raw, *before = &records->key;
    size_t shared = raw->bytes ? windrow_keyrun_shared(before->data, before->bytes, record->key, record->key_bytes, 0) : 0;
    size_t rest = record->key_bytes - shared;
    if ((status = windrow_buffer_reserve(raw, rest + record->value_bytes + 3 * WINDROW_VARINT_BYTES_MAX)))
        return status;
    uint8_t *out = raw->data + raw->bytes;
    out = windrow_varint_put(out, shared);
    out = windrow_varint_put(out, rest);
    if (rest)
        memcpy(out, record->key + shared, rest);
    out = windrow_varint_put(out + rest, record->value_bytes);
    if (record->value_bytes)
        memcpy(out, record->value, record->value_bytes);
    raw->bytes = (size_t)(out + record->value_bytes - raw->data);
    records->count++;
    before->bytes = shared;
    if (rest && (status = windrow_buffer_append(before, record->key + shared, rest)))
        return status;
    return windrow_frames_fill(&records->frames, NULL);
}

enum windrow_status windrow_records_writer_finish(struct windrow_records_writer *records, bool durable)
{
    enum windrow_status status = durable ? windrow_frames_writer_finish(&records->frames) : windrow_frames_writer_close(&records->frames);
    windrow_records_writer_abandon(records);
    return status;
}

void windrow_records_writer_abandon(struct windrow_records_writer *records)
{
    windrow_frames_writer_abandon(&records->frames);
    windrow_buffer_free(&records->key);
}

enum windrow_status windrow_records_reader_open(struct windrow_records_reader *records, const char *path)
{
    *records = (struct windrow_records_reader){.frames.descriptor = -1};
    return windrow_frames_reader_open(&records->frames, path);
}

enum windrow_status windrow_records_next(struct windrow_records_reader *records)
{
    enum windrow_status status;
    const uint8_t *end = records->frames.raw.data + records->frames.raw.bytes;
    if (!records->at || records->at == end) {
        if ((status = windrow_frames_next(&records->frames)))
            return status;
        records->key.bytes = 0;
        if (!records->frames.raw.bytes) {
            records->ended = true;
            records->at = NULL;
            return WINDROW_OK;
        }
        records->at = records->frames.raw.data;
        end = records->at + records->frames.raw.bytes;
    }
    uint64_t shared, rest = 0, value_bytes = 0;
    const uint8_t *at = windrow_varint_get(records->at, end, &shared);
    at = at ? windrow_varint_get(at, end, &rest) : NULL;
    if (!at || shared > records->key.bytes || rest > WINDROW_RECORD_BYTES_MAX || rest > (uint64_t)(end - at))
        return windrow_frames_damaged(&records->frames);
    records->key.bytes = (size_t)shared;
    if ((status = windrow_buffer_append(&records->key, at, (size_t)rest)))
        return status;
    at = windrow_varint_get(at + rest, end, &value_bytes);
    if (!at || value_bytes > (uint64_t)(end - at))
        return windrow_frames_damaged(&records->frames);
    records->record = (struct windrow_record){records->key.data, records->key.bytes, at, (size_t)value_bytes};
    records->at = at + value_bytes;
    return WINDROW_OK;
}

enum windrow_status windrow_records_seek(struct windrow_records_reader *records, const uint8_t *key, size_t key_bytes, bool *found)
{
    *found = false;
    while (!records->ended) {
        int order = windrow_keyrun_compare(records->record.key, records->record.key_bytes, key, key_bytes);
        *found = order == 0;
        if (order >= 0)
            return WINDROW_OK;
        enum windrow_status status = windrow_records_next(records);
        if (status)
            return status;
    }
    return WINDROW_OK;
}

void windrow_records_reader_close(struct windrow_records_reader *records)
{
    windrow_frames_reader_close(&records->frames);
    windrow_buffer_free(&records->key);
    *records = (struct windrow_records_reader){.frames.descriptor = -1, .ended = true};
}
