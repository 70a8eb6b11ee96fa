#include "shard/cutter.h"

#include <string.h>
#include <xxhash.h>

enum windrow_status windrow_cutter_open(struct windrow_cutter *cutter, enum windrow_block_kind kind, uint32_t segment, uint64_t first_target,
                                        const char *path)
{
    *cutter = (struct windrow_cutter){.kind = kind, .segment = segment, .first_target = first_target, .file.descriptor = -1};
    cutter->compressor = ZSTD_createCCtx();
    if (!cutter->compressor)
        return windrow_fail(WINDROW_RESOURCE, "out of memory for cutting blocks");
    ZSTD_CCtx_setParameter(cutter->compressor, ZSTD_c_compressionLevel, 1);
    ZSTD_CCtx_setParameter(cutter->compressor, ZSTD_c_checksumFlag, 1);
    return windrow_writer_open(&cutter->file, path, true);
}

static enum windrow_status write_payload(struct windrow_cutter *cutter, struct windrow_block_record *record)
{
    enum windrow_status status;
    size_t bound = ZSTD_compressBound(cutter->payload.bytes);
    cutter->frame.bytes = 0;
    if ((status = windrow_buffer_reserve(&cutter->frame, bound)))
        return status;
    size_t bytes = ZSTD_compress2(cutter->compressor, cutter->frame.data, bound, cutter->payload.data, cutter->payload.bytes);
    if (ZSTD_isError(bytes))
        return windrow_fail(WINDROW_RESOURCE, "cannot compress a block: %s", ZSTD_getErrorName(bytes));
    record->segment = cutter->segment;
    record->offset = cutter->file.written_bytes;
    record->frame_bytes = (uint32_t)bytes;
    record->payload_bytes = (uint32_t)cutter->payload.bytes;
    record->checksum = XXH3_64bits(cutter->frame.data, bytes);
    if ((status = windrow_buffer_append(&cutter->records, record, sizeof *record)))
        return status;
    return windrow_writer_append(&cutter->file, cutter->frame.data, bytes);
}

static enum windrow_status encode(struct windrow_cutter *cutter, const struct windrow_block_input *input, uint64_t links)
{
    cutter->payload.bytes = 0;
    enum windrow_status status = windrow_block_encode(input, &cutter->payload);
    if (status)
        return status;
    /* Whether the block is wide, the encoder found out: its flags stand in the payload's header. */
    struct windrow_block_record record = {.first_target = input->first_target, .target_count = input->target_count, .link_count = links,
                                          .flags = windrow_block_payload_flags(cutter->payload.data)};
    return write_payload(cutter, &record);
}

/* Takes the first sources away, which are written. */
static void drop_sources(struct windrow_cutter *cutter, uint64_t count)
{
    size_t used = (size_t)count * sizeof(uint64_t);
    cutter->sources.bytes -= used;
    if (cutter->sources.bytes)
        memmove(cutter->sources.data, cutter->sources.data + used, cutter->sources.bytes);
}

/* Writes the finished lists as a block; the sources behind them, of the current list, stay. */
static enum windrow_status write_block(struct windrow_cutter *cutter)
{
    if (!cutter->target_count)
        return WINDROW_OK;
    uint64_t *first = (uint64_t *)cutter->host_first.data, *end = (uint64_t *)cutter->host_end.data;
    uint64_t block_end = cutter->first_target + cutter->target_count;
    for (uint32_t target = 0; target < cutter->target_count; target++) {
        if (first[target] < cutter->first_target)
            first[target] = cutter->first_target;
        if (end[target] > block_end)
            end[target] = block_end;
    }
    struct windrow_block_input input = {.kind = cutter->kind, .first_target = cutter->first_target, .target_count = cutter->target_count,
                                        .sources = (uint64_t *)cutter->sources.data, .counts = (uint32_t *)cutter->counts.data,
                                        .near_first = first, .near_end = end};
    enum windrow_status status = encode(cutter, &input, cutter->closed_links);
    drop_sources(cutter, cutter->closed_links);
    cutter->first_target = block_end;
    cutter->target_count = 0;
    cutter->closed_links = 0;
    cutter->counts.bytes = cutter->host_first.bytes = cutter->host_end.bytes = 0;
    return status;
}

static enum windrow_status write_piece(struct windrow_cutter *cutter, size_t count, bool last)
{
    uint32_t count32 = (uint32_t)count;
    uint64_t none = 0;
    struct windrow_block_input input = {.kind = cutter->kind, .first_target = cutter->first_target, .target_count = 1,
                                        .flags = WINDROW_BLOCK_PIECE | (last ? WINDROW_BLOCK_LAST_PIECE : 0u),
                                        .sources = (uint64_t *)cutter->sources.data, .counts = &count32, .near_first = &none, .near_end = &none};
    enum windrow_status status = encode(cutter, &input, count);
    drop_sources(cutter, count);
    return status;
}

/* Ends the current list, if there is one. */
static enum windrow_status end_list(struct windrow_cutter *cutter)
{
    enum windrow_status status = WINDROW_OK;
    if (cutter->in_pieces) {
        status = write_piece(cutter, cutter->sources.bytes / sizeof(uint64_t), true);
        cutter->in_pieces = false;
        cutter->first_target++;
        cutter->target_count = 0;
        cutter->counts.bytes = cutter->host_first.bytes = cutter->host_end.bytes = 0;
    } else if (cutter->target_count) {
        uint64_t all = cutter->sources.bytes / sizeof(uint64_t);
        ((uint32_t *)cutter->counts.data)[cutter->target_count - 1] = (uint32_t)(all - cutter->closed_links);
        cutter->closed_links = all;
    }
    return status;
}

enum windrow_status windrow_cutter_list(struct windrow_cutter *cutter, uint64_t host_first, uint64_t host_end)
{
    enum windrow_status status = end_list(cutter);
    if (status)
        return status;
    if (cutter->target_count) {
        bool new_host = ((uint64_t *)cutter->host_end.data)[cutter->target_count - 1] != host_end;
        if ((new_host && cutter->closed_links >= WINDROW_CUTTER_LINKS / 4 * 3) || cutter->closed_links >= WINDROW_CUTTER_LINKS / 4 * 5 ||
            cutter->target_count == WINDROW_CUTTER_TARGETS)
            if ((status = write_block(cutter)))
                return status;
    }
    uint32_t none = 0;
    cutter->target_count++;
    if ((status = windrow_buffer_append(&cutter->counts, &none, sizeof none)) ||
        (status = windrow_buffer_append(&cutter->host_first, &host_first, sizeof host_first)))
        return status;
    return windrow_buffer_append(&cutter->host_end, &host_end, sizeof host_end);
}

enum windrow_status windrow_cutter_sources(struct windrow_cutter *cutter, const uint64_t *sources, size_t count)
{
    enum windrow_status status = windrow_buffer_append(&cutter->sources, sources, count * sizeof *sources);
    if (status)
        return status;
    cutter->links += count;
    if (!cutter->in_pieces && cutter->sources.bytes / sizeof *sources - cutter->closed_links > WINDROW_CUTTER_LINKS) {
        /* The current list turns out long: the lists before it become a block, and it a block of one target. */
        uint32_t current = cutter->target_count - 1;
        cutter->target_count = current;
        if ((status = write_block(cutter)))
            return status;
        cutter->in_pieces = true;
    }
    while (cutter->in_pieces && cutter->sources.bytes / sizeof *sources > WINDROW_CUTTER_LINKS)
        if ((status = write_piece(cutter, WINDROW_CUTTER_LINKS, false)))
            return status;
    return WINDROW_OK;
}

enum windrow_status windrow_cutter_finish(struct windrow_cutter *cutter, uint64_t *bytes, uint64_t *checksum)
{
    enum windrow_status status = end_list(cutter);
    if (!status)
        status = write_block(cutter);
    *bytes = cutter->file.written_bytes;
    return status ? status : windrow_writer_finish(&cutter->file, checksum);
}

void windrow_cutter_free(struct windrow_cutter *cutter)
{
    windrow_writer_abandon(&cutter->file);
    windrow_buffer_free(&cutter->records);
    windrow_buffer_free(&cutter->sources);
    windrow_buffer_free(&cutter->counts);
    windrow_buffer_free(&cutter->host_first);
    windrow_buffer_free(&cutter->host_end);
    windrow_buffer_free(&cutter->payload);
    windrow_buffer_free(&cutter->frame);
    ZSTD_freeCCtx(cutter->compressor);
    cutter->compressor = NULL;
}
