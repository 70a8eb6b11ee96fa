#include "shard/frames.h"

#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <string.h>

#define FRAME_BYTES_MOST (64u << 20) /* no entry is that long */
#define HEADER_BYTES 8

enum windrow_status windrow_frames_writer_open(struct windrow_frames_writer *frames, const char *path)
{
    *frames = (struct windrow_frames_writer){.writer.descriptor = -1};
    frames->compressor = ZSTD_createCCtx();
    if (!frames->compressor)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while creating %s", path);
    ZSTD_CCtx_setParameter(frames->compressor, ZSTD_c_compressionLevel, 1);
    ZSTD_CCtx_setParameter(frames->compressor, ZSTD_c_checksumFlag, 1);
    enum windrow_status status = windrow_writer_open(&frames->writer, path, false);
    if (!status)
        status = windrow_buffer_reserve(&frames->raw, WINDROW_FRAME_BYTES + 8192);
    if (status)
        windrow_frames_writer_abandon(frames);
    return status;
}

enum windrow_status windrow_frames_cut(struct windrow_frames_writer *frames)
{
    if (!frames->raw.bytes)
        return WINDROW_OK;
    if (frames->raw.bytes > FRAME_BYTES_MOST)
        return windrow_fail(WINDROW_BUG, "a scratch frame of %zu bytes in %s", frames->raw.bytes, frames->writer.path);
    frames->compressed.bytes = 0;
    size_t bound = ZSTD_compressBound(frames->raw.bytes);
    enum windrow_status status = windrow_buffer_reserve(&frames->compressed, HEADER_BYTES + bound);
    if (status)
        return status;
    size_t bytes = ZSTD_compress2(frames->compressor, frames->compressed.data + HEADER_BYTES, bound, frames->raw.data, frames->raw.bytes);
    if (ZSTD_isError(bytes))
        return windrow_fail(WINDROW_RESOURCE, "cannot compress for %s: %s", frames->writer.path, ZSTD_getErrorName(bytes));
    uint32_t header[2] = {(uint32_t)frames->raw.bytes, (uint32_t)bytes};
    memcpy(frames->compressed.data, header, HEADER_BYTES);
    frames->raw.bytes = 0;
    return windrow_writer_append(&frames->writer, frames->compressed.data, HEADER_BYTES + bytes);
}

enum windrow_status windrow_frames_fill(struct windrow_frames_writer *frames, bool *closed)
{
    bool full = frames->raw.bytes >= WINDROW_FRAME_BYTES;
    if (closed)
        *closed = full;
    return full ? windrow_frames_cut(frames) : WINDROW_OK;
}

uint64_t windrow_frames_offset(const struct windrow_frames_writer *frames)
{
    return frames->writer.written_bytes;
}

static enum windrow_status end(struct windrow_frames_writer *frames, bool durable)
{
    static const uint32_t nothing[2];
    enum windrow_status status = windrow_frames_cut(frames);
    if (!status)
        status = windrow_writer_append(&frames->writer, nothing, HEADER_BYTES);
    if (!status)
        status = durable ? windrow_writer_finish(&frames->writer, NULL) : windrow_writer_close(&frames->writer);
    windrow_frames_writer_abandon(frames);
    return status;
}

enum windrow_status windrow_frames_writer_finish(struct windrow_frames_writer *frames)
{
    return end(frames, true);
}

enum windrow_status windrow_frames_writer_close(struct windrow_frames_writer *frames)
{
    return end(frames, false);
}

void windrow_frames_writer_abandon(struct windrow_frames_writer *frames)
{
    windrow_writer_abandon(&frames->writer);
    windrow_buffer_free(&frames->raw);
    windrow_buffer_free(&frames->compressed);
    ZSTD_freeCCtx(frames->compressor);
    frames->compressor = NULL;
}

enum windrow_status windrow_frames_reader_open(struct windrow_frames_reader *frames, const char *path)
{
    *frames = (struct windrow_frames_reader){.descriptor = -1};
    frames->path = strdup(path);
    frames->decompressor = ZSTD_createDCtx();
    if (!frames->path || !frames->decompressor) {
        windrow_frames_reader_close(frames);
        return windrow_fail(WINDROW_RESOURCE, "out of memory while opening %s", path);
    }
    frames->descriptor = windrow_files.open(path, O_RDONLY, 0);
    if (frames->descriptor < 0) {
        enum windrow_status status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open the scratch file %s", path);
        windrow_frames_reader_close(frames);
        return status;
    }
    return WINDROW_OK;
}

void windrow_frames_seek(struct windrow_frames_reader *frames, uint64_t offset)
{
    frames->offset = offset;
    frames->raw.bytes = 0;
}

enum windrow_status windrow_frames_damaged(const struct windrow_frames_reader *frames)
{
    return windrow_fail(WINDROW_DAMAGED, "the scratch file %s is damaged before byte %llu; remove the unfinished store and shard again",
                        frames->path, (unsigned long long)frames->offset);
}

enum windrow_status windrow_frames_next(struct windrow_frames_reader *frames)
{
    frames->raw.bytes = 0;
    uint32_t header[2];
    ssize_t got;
    do
        got = windrow_files.read_at(frames->descriptor, header, HEADER_BYTES, (off_t)frames->offset);
    while (got < 0 && errno == EINTR);
    if (got < 0)
        return windrow_fail_system(WINDROW_DAMAGED, errno, "cannot read %s", frames->path);
    if (got == HEADER_BYTES && !header[0] && !header[1])
        return WINDROW_OK;
    if (got != HEADER_BYTES || !header[0] || header[0] > FRAME_BYTES_MOST || header[1] > ZSTD_compressBound(FRAME_BYTES_MOST))
        return windrow_frames_damaged(frames);
    frames->compressed.bytes = 0;
    enum windrow_status status = windrow_buffer_reserve(&frames->compressed, header[1]);
    if (!status)
        status = windrow_buffer_reserve(&frames->raw, header[0]);
    if (!status)
        status = windrow_file_read_at(frames->descriptor, frames->path, frames->compressed.data, header[1], frames->offset + HEADER_BYTES);
    if (status)
        return status;
    size_t bytes = ZSTD_decompressDCtx(frames->decompressor, frames->raw.data, header[0], frames->compressed.data, header[1]);
    if (ZSTD_isError(bytes) || bytes != header[0])
        return windrow_frames_damaged(frames);
    frames->raw.bytes = bytes;
    frames->offset += HEADER_BYTES + header[1];
    return WINDROW_OK;
}

void windrow_frames_reader_close(struct windrow_frames_reader *frames)
{
    if (frames->path && frames->descriptor >= 0)
        windrow_files.close(frames->descriptor);
    free(frames->path);
    windrow_buffer_free(&frames->compressed);
    windrow_buffer_free(&frames->raw);
    ZSTD_freeDCtx(frames->decompressor);
    *frames = (struct windrow_frames_reader){.descriptor = -1};
}
