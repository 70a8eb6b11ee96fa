#include "dump/stream.h"

#include "base/file.h"

#include <archive.h>
#include <archive_entry.h>
#include <errno.h>
#include <fcntl.h>
#include <inttypes.h>
#include <stdbool.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

enum { BLOCK_BYTES = 256 << 10, MAGIC_BYTES = 6 };

struct windrow_stream {
    const char *path; /* for messages; "standard input" for "-" */
    int descriptor;
    bool own_descriptor;
    bool ended;
    atomic_uint_fast64_t *consumed;
    uint64_t file_bytes;    /* read from the file */
    uint64_t written_bytes; /* handed out */
    struct archive *archive; /* NULL for plain text */
    char *block;
    size_t block_at;         /* what of the block plain reading has used */
    size_t block_bytes;
    int read_error; /* errno of a failed read inside libarchive's call-back */
};

static ssize_t file_read(struct windrow_stream *stream, char *out, size_t capacity)
{
    ssize_t got;
    do {
        got = windrow_files.read(stream->descriptor, out, capacity);
    } while (got < 0 && errno == EINTR);
    if (got > 0) {
        stream->file_bytes += (uint64_t)got;
        atomic_fetch_add_explicit(stream->consumed, (uint64_t)got, memory_order_relaxed);
    }
    return got;
}

static enum windrow_status read_failed(const struct windrow_stream *stream, int error_number)
{
    return windrow_fail_system(WINDROW_INPUT, error_number, "cannot read %s at byte %" PRIu64, stream->path,
                               stream->file_bytes);
}

/* libarchive's call-back. The block that was read to recognise the format comes first. */
static la_ssize_t block_read(struct archive *archive, void *context, const void **block)
{
    (void)archive;
    struct windrow_stream *stream = context;
    *block = stream->block;
    if (stream->block_at == 0 && stream->block_bytes > 0) {
        stream->block_at = stream->block_bytes;
        return (la_ssize_t)stream->block_bytes;
    }
    ssize_t got = file_read(stream, stream->block, BLOCK_BYTES);
    if (got < 0)
        stream->read_error = errno;
    return got;
}

static bool is_compressed(const unsigned char *bytes, size_t count)
{
    if (count < 4)
        return false;
    uint32_t word = (uint32_t)bytes[0] | (uint32_t)bytes[1] << 8 | (uint32_t)bytes[2] << 16 | (uint32_t)bytes[3] << 24;
    return (bytes[0] == 0x1F && bytes[1] == 0x8B) ||                   /* gzip, RFC 1952 */
           word == 0xFD2FB528 || (word & 0xFFFFFFF0) == 0x184D2A50 || /* zstd and skippable frames, RFC 8878 */
           word == 0x184D2204 || word == 0x184C2102 ||                /* lz4 frame, new and legacy */
           memcmp(bytes, "BZh", 3) == 0 || (count >= MAGIC_BYTES && memcmp(bytes, "\xFD" "7zXZ", MAGIC_BYTES) == 0);
}

static enum windrow_status damaged(struct windrow_stream *stream)
{
    if (stream->read_error != 0)
        return read_failed(stream, stream->read_error);
    const char *reason = archive_error_string(stream->archive);
    /* Negative when not even the first block could be decompressed. */
    int64_t at = archive_filter_bytes(stream->archive, -1);
    if (at < 0)
        at = (int64_t)stream->file_bytes;
    if (archive_errno(stream->archive) == ENOMEM)
        return windrow_fail(WINDROW_RESOURCE, "no memory to decompress %s", stream->path);
    return windrow_fail(WINDROW_INPUT,
                        "%s is damaged or cut short: %s at byte %" PRId64 " of the file, behind %" PRIu64
                        " decompressed bytes; get the file again",
                        stream->path, reason != NULL ? reason : "the compressed data ends too early", at,
                        stream->written_bytes);
}

/* At the end of the compressed data: is it the end of the file as well? */
static enum windrow_status end_check(struct windrow_stream *stream)
{
    uint64_t used = (uint64_t)archive_filter_bytes(stream->archive, -1);
    bool more = stream->file_bytes > used;
    if (!more) {
        ssize_t got = file_read(stream, stream->block, BLOCK_BYTES);
        if (got < 0)
            return read_failed(stream, errno);
        more = got > 0;
    }
    if (more)
        return windrow_fail(WINDROW_INPUT,
                            "%s goes on behind its compressed data, which ends at byte %" PRIu64
                            ", with something else; get the file again, or cut it there",
                            stream->path, used);
    return WINDROW_OK;
}

static enum windrow_status archive_start(struct windrow_stream *stream)
{
    struct archive *archive = stream->archive = archive_read_new();
    if (archive == NULL)
        return windrow_fail(WINDROW_RESOURCE, "no memory to decompress %s", stream->path);
    if (archive_read_support_filter_gzip(archive) != ARCHIVE_OK || archive_read_support_filter_zstd(archive) != ARCHIVE_OK ||
        archive_read_support_filter_bzip2(archive) != ARCHIVE_OK || archive_read_support_filter_xz(archive) != ARCHIVE_OK ||
        archive_read_support_filter_lz4(archive) != ARCHIVE_OK || archive_read_support_format_raw(archive) != ARCHIVE_OK ||
        archive_read_support_format_empty(archive) != ARCHIVE_OK)
        return windrow_fail(WINDROW_BUG, "libarchive was built without a compression that dumps may have: %s",
                            archive_error_string(archive));
    struct archive_entry *entry;
    if (archive_read_open(archive, stream, NULL, block_read, NULL) != ARCHIVE_OK)
        return damaged(stream);
    int result = archive_read_next_header(archive, &entry);
    if (result == ARCHIVE_EOF) {
        stream->ended = true;
        return end_check(stream);
    }
    return result == ARCHIVE_OK ? WINDROW_OK : damaged(stream);
}

enum windrow_status windrow_stream_open(const char *path, atomic_uint_fast64_t *consumed, struct windrow_stream **out)
{
    *out = NULL;
    struct windrow_stream *stream = calloc(1, sizeof *stream);
    if (stream == NULL)
        return windrow_fail(WINDROW_RESOURCE, "no memory to read %s", path);
    bool standard_input = strcmp(path, "-") == 0;
    stream->path = standard_input ? "standard input" : path;
    stream->consumed = consumed;
    stream->descriptor = standard_input ? STDIN_FILENO : windrow_files.open(path, O_RDONLY | O_CLOEXEC, 0);
    stream->own_descriptor = !standard_input;
    enum windrow_status status = WINDROW_OK;
    if (stream->descriptor < 0) {
        status = windrow_fail_system(WINDROW_INPUT, errno, "cannot open the dump %s", path);
        goto out;
    }
    stream->block = malloc(BLOCK_BYTES);
    if (stream->block == NULL) {
        status = windrow_fail(WINDROW_RESOURCE, "no memory to read %s", path);
        goto out;
    }
    /* Only a hint: pipes refuse it. */
    posix_fadvise(stream->descriptor, 0, 0, POSIX_FADV_SEQUENTIAL);
    /* A pipe may hand out less than what it takes to recognise a format. */
    while (stream->block_bytes < MAGIC_BYTES) {
        ssize_t got = file_read(stream, stream->block + stream->block_bytes, BLOCK_BYTES - stream->block_bytes);
        if (got < 0) {
            status = read_failed(stream, errno);
            goto out;
        }
        if (got == 0)
            break;
        stream->block_bytes += (size_t)got;
    }
    if (is_compressed((const unsigned char *)stream->block, stream->block_bytes))
        status = archive_start(stream);
out:
    if (status != WINDROW_OK) {
        windrow_stream_close(stream);
        return status;
    }
    *out = stream;
    return WINDROW_OK;
}

static enum windrow_status plain_read(struct windrow_stream *stream, char *out, size_t capacity, size_t *bytes)
{
    size_t left = stream->block_bytes - stream->block_at;
    if (left > 0) {
        *bytes = left < capacity ? left : capacity;
        memcpy(out, stream->block + stream->block_at, *bytes);
        stream->block_at += *bytes;
        return WINDROW_OK;
    }
    ssize_t got = file_read(stream, out, capacity);
    if (got < 0)
        return read_failed(stream, errno);
    *bytes = (size_t)got;
    return WINDROW_OK;
}

enum windrow_status windrow_stream_read(struct windrow_stream *stream, char *out, size_t capacity, size_t *bytes)
{
    *bytes = 0;
    if (stream->archive == NULL) {
        enum windrow_status status = plain_read(stream, out, capacity, bytes);
        stream->written_bytes += *bytes;
        return status;
    }
    if (stream->ended)
        return WINDROW_OK;
    la_ssize_t got = archive_read_data(stream->archive, out, capacity);
    if (got < 0)
        return damaged(stream);
    if (got == 0) {
        stream->ended = true;
        return end_check(stream);
    }
    stream->written_bytes += (uint64_t)got;
    *bytes = (size_t)got;
    return WINDROW_OK;
}

void windrow_stream_close(struct windrow_stream *stream)
{
    if (stream == NULL)
        return;
    if (stream->archive != NULL)
        archive_read_free(stream->archive);
    if (stream->own_descriptor && stream->descriptor >= 0)
        windrow_files.close(stream->descriptor);
    free(stream->block);
    free(stream);
}
