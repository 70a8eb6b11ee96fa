#include "shard/linkrun.h"

#include "base/varint.h"

#include <stdlib.h>
#include <string.h>

enum windrow_status windrow_linkrun_writer_open(struct windrow_linkrun_writer *run, const char *path)
{
    run->last_target = run->last_first = 0;
    return windrow_frames_writer_open(&run->frames, path);
}

/* The head of an entry; the caller has reserved room. */
static uint8_t *put_head(struct windrow_linkrun_writer *run, uint8_t *out, uint64_t target, uint64_t first, size_t count, bool more)
{
    if (!run->frames.raw.bytes)
        run->last_target = run->last_first = 0;
    out = windrow_varint_put(out, target - run->last_target);
    out = windrow_varint_put(out, (uint64_t)count * 2 + more);
    out = windrow_varint_put(out, windrow_zigzag(first, run->last_first));
    run->last_target = target;
    run->last_first = first;
    return out;
}

static enum windrow_status put_entry(struct windrow_linkrun_writer *run, uint64_t target, const uint32_t *narrow, const uint64_t *wide,
                                     size_t count, bool more)
{
    struct windrow_buffer *raw = &run->frames.raw;
    enum windrow_status status = windrow_buffer_reserve(raw, (count + 3) * WINDROW_VARINT_BYTES_MAX);
    if (status)
        return status;
    uint8_t *out = raw->data + raw->bytes;
    if (narrow) {
        out = put_head(run, out, target, narrow[0], count, more);
        for (size_t index = 1; index < count; index++)
            out = windrow_varint_put(out, narrow[index] - narrow[index - 1] - 1);
    } else {
        out = put_head(run, out, target, wide[0], count, more);
        for (size_t index = 1; index < count; index++)
            out = windrow_varint_put(out, wide[index] - wide[index - 1] - 1);
    }
    raw->bytes = (size_t)(out - raw->data);
    return windrow_frames_fill(&run->frames, NULL);
}

enum windrow_status windrow_linkrun_put_narrow(struct windrow_linkrun_writer *run, uint64_t target, const uint32_t *sources, size_t count)
{
    while (count) {
        size_t part = count < WINDROW_LINKRUN_SOURCES ? count : WINDROW_LINKRUN_SOURCES;
        enum windrow_status status = put_entry(run, target, sources, NULL, part, part < count);
        if (status)
            return status;
        sources += part;
        count -= part;
    }
    return WINDROW_OK;
}

enum windrow_status windrow_linkrun_put(struct windrow_linkrun_writer *run, uint64_t target, const uint64_t *sources, size_t count, bool more)
{
    return put_entry(run, target, NULL, sources, count, more);
}

enum windrow_status windrow_linkrun_cut(struct windrow_linkrun_writer *run)
{
    return windrow_frames_cut(&run->frames);
}

enum windrow_status windrow_linkrun_writer_finish(struct windrow_linkrun_writer *run)
{
    return windrow_frames_writer_finish(&run->frames);
}

void windrow_linkrun_writer_abandon(struct windrow_linkrun_writer *run)
{
    windrow_frames_writer_abandon(&run->frames);
}

enum windrow_status windrow_linkrun_reader_open(struct windrow_linkrun_reader *run, const char *path)
{
    *run = (struct windrow_linkrun_reader){.ended = true, .end_offset = UINT64_MAX};
    enum windrow_status status = windrow_frames_reader_open(&run->frames, path);
    if (status)
        return status;
    run->sources = malloc(WINDROW_LINKRUN_SOURCES * sizeof *run->sources);
    if (!run->sources) {
        windrow_linkrun_reader_close(run);
        return windrow_fail(WINDROW_RESOURCE, "out of memory while opening %s", path);
    }
    return WINDROW_OK;
}

void windrow_linkrun_seek(struct windrow_linkrun_reader *run, uint64_t offset, uint64_t end_offset)
{
    windrow_frames_seek(&run->frames, offset);
    run->end_offset = end_offset;
    run->at = NULL;
}

enum windrow_status windrow_linkrun_next(struct windrow_linkrun_reader *run)
{
    const uint8_t *end = run->frames.raw.data + run->frames.raw.bytes;
    run->ended = false;
    run->used = 0;
    if (!run->at || run->at == end) {
        if (run->frames.offset >= run->end_offset) {
            run->ended = true;
            return WINDROW_OK;
        }
        enum windrow_status status = windrow_frames_next(&run->frames);
        if (status)
            return status;
        if (!run->frames.raw.bytes) {
            run->ended = true;
            return WINDROW_OK;
        }
        run->at = run->frames.raw.data;
        end = run->at + run->frames.raw.bytes;
        run->target = run->last_first = 0;
    }
    uint64_t gap, count = 0, first;
    const uint8_t *at = windrow_varint_get(run->at, end, &gap);
    at = at ? windrow_varint_get(at, end, &count) : NULL;
    at = at ? windrow_varint_get(at, end, &first) : NULL;
    if (!at || count < 2 || count / 2 > WINDROW_LINKRUN_SOURCES)
        return windrow_frames_damaged(&run->frames);
    run->target += gap;
    run->count = (size_t)(count / 2);
    run->more = count & 1;
    uint64_t source = windrow_unzigzag(run->last_first, first);
    run->last_first = source;
    run->sources[0] = source;
    for (size_t index = 1; index < run->count; index++) {
        uint64_t step;
        if (!(at = windrow_varint_get(at, end, &step)))
            return windrow_frames_damaged(&run->frames);
        source += step + 1;
        run->sources[index] = source;
    }
    run->at = at;
    return WINDROW_OK;
}

void windrow_linkrun_reader_close(struct windrow_linkrun_reader *run)
{
    windrow_frames_reader_close(&run->frames);
    free(run->sources);
    *run = (struct windrow_linkrun_reader){.frames.descriptor = -1, .ended = true};
}
