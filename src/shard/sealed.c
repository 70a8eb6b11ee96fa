#include "shard/sealed.h"

#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <string.h>
#include <xxhash.h>

#define SEAL_BYTES sizeof(uint64_t)
#define BLOCK_BYTES (256 * 1024)

static enum windrow_status damaged(const char *path)
{
    return windrow_fail(WINDROW_DAMAGED, "the scratch file %s is damaged; remove the unfinished store and shard again", path);
}

enum windrow_status windrow_sealed_replace(const char *path, const void *bytes, size_t count)
{
    struct windrow_buffer sealed = {0};
    uint64_t seal = XXH3_64bits(bytes, count);
    enum windrow_status status = windrow_buffer_append(&sealed, bytes, count);
    if (!status)
        status = windrow_buffer_append(&sealed, &seal, sizeof seal);
    if (!status)
        status = windrow_file_replace(path, sealed.data, sealed.bytes);
    windrow_buffer_free(&sealed);
    return status;
}

enum windrow_status windrow_sealed_load(const char *path, struct windrow_buffer *out)
{
    enum windrow_status status = windrow_file_load(path, SIZE_MAX / 2, out);
    if (status == WINDROW_NO)
        return WINDROW_DAMAGED;
    if (status)
        return status;
    uint64_t seal;
    if (out->bytes < SEAL_BYTES)
        return damaged(path);
    out->bytes -= SEAL_BYTES;
    memcpy(&seal, out->data + out->bytes, sizeof seal);
    return seal == XXH3_64bits(out->data, out->bytes) ? WINDROW_OK : damaged(path);
}

enum windrow_status windrow_sealed_check(const char *path, uint64_t *content_bytes)
{
    struct stat facts;
    uint8_t *block = malloc(BLOCK_BYTES);
    XXH3_state_t *state = XXH3_createState();
    int descriptor = windrow_files.open(path, O_RDONLY, 0);
    enum windrow_status status = WINDROW_OK;
    *content_bytes = 0;
    if (descriptor < 0 || fstat(descriptor, &facts))
        status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open the scratch file %s", path);
    else if (!block || !state)
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while reading %s", path);
    else if ((uint64_t)facts.st_size < SEAL_BYTES)
        status = damaged(path);
    if (!status) {
        uint64_t end = (uint64_t)facts.st_size - SEAL_BYTES, seal;
        XXH3_64bits_reset(state);
        for (uint64_t at = 0; !status && at < end; at += BLOCK_BYTES) {
            size_t part = end - at < BLOCK_BYTES ? (size_t)(end - at) : BLOCK_BYTES;
            status = windrow_file_read_at(descriptor, path, block, part, at);
            if (!status)
                XXH3_64bits_update(state, block, part);
        }
        if (!status)
            status = windrow_file_read_at(descriptor, path, &seal, sizeof seal, end);
        if (!status && seal != XXH3_64bits_digest(state))
            status = damaged(path);
        *content_bytes = end;
    }
    if (descriptor >= 0)
        windrow_files.close(descriptor);
    XXH3_freeState(state);
    free(block);
    return status;
}
