#include "base/file.h"

#include <errno.h>
#include <fcntl.h>
#include <ftw.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <sys/resource.h>
#include <sys/statvfs.h>
#include <unistd.h>
#include <xxhash.h>

#define PENDING_BYTES (256 * 1024)

static int open_file(const char *path, int flags, mode_t mode)
{
    return open(path, flags | O_CLOEXEC, mode);
}

struct windrow_file_functions windrow_files = {
    .open = open_file,
    .close = close,
    .read = read,
    .read_at = pread,
    .write = write,
    .write_at = pwrite,
    .sync_data = fdatasync,
    .sync = fsync,
    .reserve = posix_fallocate,
    .rename = rename,
    .unlink = unlink,
    .make_directory = mkdir,
};

enum windrow_status windrow_buffer_reserve(struct windrow_buffer *buffer, size_t more)
{
    if (buffer->capacity_bytes - buffer->bytes >= more)
        return WINDROW_OK;
    /* Nothing is that large; beyond it the sums below would begin again at 0. */
    bool absurd = more > SIZE_MAX / 2 || buffer->bytes > SIZE_MAX / 2 - more;
    size_t capacity = buffer->capacity_bytes ? buffer->capacity_bytes : 256;
    while (!absurd && capacity < buffer->bytes + more)
        capacity += capacity / 2 + 1;
    uint8_t *data = absurd ? NULL : realloc(buffer->data, capacity);
    if (!data)
        return windrow_fail(WINDROW_RESOURCE, "out of memory: %zu more bytes were needed; a smaller --memory leaves more room", more);
    buffer->data = data;
    buffer->capacity_bytes = capacity;
    return WINDROW_OK;
}

enum windrow_status windrow_buffer_append(struct windrow_buffer *buffer, const void *data, size_t bytes)
{
    enum windrow_status status = windrow_buffer_reserve(buffer, bytes);
    if (status)
        return status;
    if (bytes)
        memcpy(buffer->data + buffer->bytes, data, bytes);
    buffer->bytes += bytes;
    return WINDROW_OK;
}

void windrow_buffer_free(struct windrow_buffer *buffer)
{
    free(buffer->data);
    *buffer = (struct windrow_buffer){0};
}

char *windrow_path(const char *directory, const char *name_format, ...)
{
    char *name = NULL, *path = NULL;
    va_list arguments;
    va_start(arguments, name_format);
    int name_bytes = vasprintf(&name, name_format, arguments);
    va_end(arguments);
    if (name_bytes < 0)
        return NULL;
    if (asprintf(&path, "%s/%s", directory, name) < 0)
        path = NULL;
    free(name);
    return path;
}

static enum windrow_status write_all(int descriptor, const char *path, const uint8_t *data, size_t bytes)
{
    while (bytes) {
        ssize_t written = windrow_files.write(descriptor, data, bytes);
        if (written < 0 && errno == EINTR)
            continue;
        if (written <= 0)
            return windrow_fail_system(WINDROW_RESOURCE, written ? errno : ENOSPC, "cannot write %s", path);
        data += written;
        bytes -= (size_t)written;
    }
    return WINDROW_OK;
}

static enum windrow_status writer_start(struct windrow_writer *writer, const char *path, int flags, bool with_checksum)
{
    *writer = (struct windrow_writer){.descriptor = -1};
    writer->path = strdup(path);
    if (!writer->path || windrow_buffer_reserve(&writer->pending, PENDING_BYTES))
        goto memory;
    if (with_checksum) {
        writer->checksum = XXH3_createState();
        if (!writer->checksum)
            goto memory;
        XXH3_64bits_reset(writer->checksum);
    }
    writer->descriptor = windrow_files.open(path, flags, 0666);
    if (writer->descriptor < 0) {
        enum windrow_status status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot create %s", path);
        windrow_writer_abandon(writer);
        return status;
    }
    return WINDROW_OK;
memory:
    windrow_writer_abandon(writer);
    return windrow_fail(WINDROW_RESOURCE, "out of memory while creating %s", path);
}

enum windrow_status windrow_writer_open(struct windrow_writer *writer, const char *path, bool with_checksum)
{
    return writer_start(writer, path, O_WRONLY | O_CREAT | O_TRUNC, with_checksum);
}

static enum windrow_status writer_flush(struct windrow_writer *writer)
{
    enum windrow_status status = write_all(writer->descriptor, writer->path, writer->pending.data, writer->pending.bytes);
    writer->pending.bytes = 0;
    return status;
}

enum windrow_status windrow_writer_append(struct windrow_writer *writer, const void *data, size_t bytes)
{
    if (writer->checksum)
        XXH3_64bits_update(writer->checksum, data, bytes);
    writer->written_bytes += bytes;
    if (writer->pending.bytes + bytes > PENDING_BYTES) {
        enum windrow_status status = writer_flush(writer);
        if (status)
            return status;
        if (bytes >= PENDING_BYTES)
            return write_all(writer->descriptor, writer->path, data, bytes);
    }
    if (bytes)
        memcpy(writer->pending.data + writer->pending.bytes, data, bytes);
    writer->pending.bytes += bytes;
    return WINDROW_OK;
}

enum windrow_status windrow_writer_sync(struct windrow_writer *writer)
{
    enum windrow_status status = writer_flush(writer);
    if (!status && windrow_files.sync_data(writer->descriptor))
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot sync %s", writer->path);
    return status;
}

enum windrow_status windrow_writer_seal(struct windrow_writer *writer)
{
    uint64_t digest = XXH3_64bits_digest(writer->checksum);
    return windrow_writer_append(writer, &digest, sizeof digest);
}

static enum windrow_status writer_end(struct windrow_writer *writer, enum windrow_status status)
{
    if (windrow_files.close(writer->descriptor) && !status)
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot close %s", writer->path);
    writer->descriptor = -1;
    windrow_writer_abandon(writer);
    return status;
}

enum windrow_status windrow_writer_finish(struct windrow_writer *writer, uint64_t *checksum)
{
    enum windrow_status status = windrow_writer_sync(writer);
    if (checksum)
        *checksum = writer->checksum ? XXH3_64bits_digest(writer->checksum) : 0;
    return writer_end(writer, status);
}

enum windrow_status windrow_writer_close(struct windrow_writer *writer)
{
    return writer_end(writer, writer_flush(writer));
}

void windrow_writer_abandon(struct windrow_writer *writer)
{
    if (writer->path && writer->descriptor >= 0)
        windrow_files.close(writer->descriptor);
    if (writer->checksum)
        XXH3_freeState(writer->checksum);
    free(writer->path);
    windrow_buffer_free(&writer->pending);
    *writer = (struct windrow_writer){.descriptor = -1};
}

enum windrow_status windrow_map_open(struct windrow_map *map, const char *path)
{
    *map = (struct windrow_map){.descriptor = -1};
    int descriptor = windrow_files.open(path, O_RDONLY, 0);
    if (descriptor < 0)
        return windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open %s", path);
    struct stat facts;
    if (fstat(descriptor, &facts)) {
        windrow_files.close(descriptor);
        return windrow_fail_system(WINDROW_DAMAGED, errno, "cannot look at %s", path);
    }
    map->bytes = (uint64_t)facts.st_size;
    map->descriptor = descriptor;
    if (map->bytes) {
        void *data = mmap(NULL, map->bytes, PROT_READ, MAP_SHARED, descriptor, 0);
        if (data == MAP_FAILED) {
            int error_number = errno;
            windrow_map_close(map);
            return windrow_fail_system(WINDROW_RESOURCE, error_number, "cannot map %s", path);
        }
        map->data = data;
    }
    return WINDROW_OK;
}

void windrow_map_close(struct windrow_map *map)
{
    if (map->data)
        munmap((void *)map->data, map->bytes);
    if (map->data || map->bytes || map->descriptor > 0)
        if (map->descriptor >= 0)
            windrow_files.close(map->descriptor);
    *map = (struct windrow_map){.descriptor = -1};
}

enum windrow_status windrow_file_checksum(const char *path, uint64_t *bytes, uint64_t *checksum)
{
    enum windrow_status status = WINDROW_OK;
    uint8_t *block = malloc(PENDING_BYTES);
    XXH3_state_t *state = XXH3_createState();
    int descriptor = windrow_files.open(path, O_RDONLY, 0);
    *bytes = 0;
    if (descriptor < 0) {
        status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open %s", path);
        goto out;
    }
    if (!block || !state) {
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while reading %s", path);
        goto out;
    }
    XXH3_64bits_reset(state);
    for (;;) {
        ssize_t got = windrow_files.read(descriptor, block, PENDING_BYTES);
        if (got < 0 && errno == EINTR)
            continue;
        if (got < 0) {
            status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot read %s at byte %llu", path, (unsigned long long)*bytes);
            goto out;
        }
        if (got == 0)
            break;
        XXH3_64bits_update(state, block, (size_t)got);
        *bytes += (uint64_t)got;
    }
    *checksum = XXH3_64bits_digest(state);
out:
    if (descriptor >= 0)
        windrow_files.close(descriptor);
    XXH3_freeState(state);
    free(block);
    return status;
}

enum windrow_status windrow_file_read_at(int descriptor, const char *path, void *bytes, size_t count, uint64_t offset)
{
    uint8_t *to = bytes;
    while (count) {
        ssize_t got = windrow_files.read_at(descriptor, to, count, (off_t)offset);
        if (got < 0 && errno == EINTR)
            continue;
        if (got < 0)
            return windrow_fail_system(WINDROW_DAMAGED, errno, "cannot read %s at byte %llu", path, (unsigned long long)offset);
        if (got == 0)
            return windrow_fail(WINDROW_DAMAGED, "%s ends at byte %llu, %zu bytes too early: the file was cut; make it again",
                                path, (unsigned long long)offset, count);
        to += got;
        count -= (size_t)got;
        offset += (uint64_t)got;
    }
    return WINDROW_OK;
}

enum windrow_status windrow_file_write_at(int descriptor, const char *path, const void *bytes, size_t count, uint64_t offset)
{
    const uint8_t *from = bytes;
    while (count) {
        ssize_t put = windrow_files.write_at(descriptor, from, count, (off_t)offset);
        if (put < 0 && errno == EINTR)
            continue;
        if (put <= 0)
            return windrow_fail_system(WINDROW_RESOURCE, put ? errno : ENOSPC, "cannot write %s at byte %llu", path, (unsigned long long)offset);
        from += put;
        count -= (size_t)put;
        offset += (uint64_t)put;
    }
    return WINDROW_OK;
}

enum windrow_status windrow_file_replace(const char *path, const void *bytes, size_t count)
{
    enum windrow_status status = WINDROW_OK;
    char *aside = NULL, *directory = NULL;
    struct windrow_writer writer = {.descriptor = -1};
    if (asprintf(&aside, "%s.new", path) < 0)
        aside = NULL;
    directory = strdup(path);
    if (!aside || !directory) {
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while writing %s", path);
        goto out;
    }
    if ((status = windrow_writer_open(&writer, aside, false)))
        goto out;
    if ((status = windrow_writer_append(&writer, bytes, count)))
        goto out;
    if ((status = windrow_writer_finish(&writer, NULL)))
        goto out;
    if (windrow_files.rename(aside, path)) {
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot rename %s", aside);
        goto out;
    }
    char *slash = strrchr(directory, '/');
    if (slash == directory)
        slash[1] = 0;
    else if (slash)
        *slash = 0;
    status = windrow_directory_sync(slash ? directory : ".");
out:
    windrow_writer_abandon(&writer);
    free(aside);
    free(directory);
    return status;
}

enum windrow_status windrow_file_load(const char *path, size_t most_bytes, struct windrow_buffer *out)
{
    out->bytes = 0;
    int descriptor = windrow_files.open(path, O_RDONLY, 0);
    if (descriptor < 0) {
        if (errno == ENOENT)
            return windrow_fail(WINDROW_NO, "%s does not exist", path);
        return windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open %s", path);
    }
    enum windrow_status status = WINDROW_OK;
    for (;;) {
        if ((status = windrow_buffer_reserve(out, 64 * 1024)))
            break;
        ssize_t got = windrow_files.read(descriptor, out->data + out->bytes, 64 * 1024);
        if (got < 0 && errno == EINTR)
            continue;
        if (got < 0)
            status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot read %s", path);
        if (got <= 0)
            break;
        out->bytes += (size_t)got;
        if (out->bytes > most_bytes) {
            status = windrow_fail(WINDROW_DAMAGED, "%s is larger than the %zu bytes that it can have", path, most_bytes);
            break;
        }
    }
    windrow_files.close(descriptor);
    return status;
}

bool windrow_file_exists(const char *path)
{
    struct stat facts;
    return stat(path, &facts) == 0;
}

enum windrow_status windrow_directory_make(const char *path)
{
    if (windrow_files.make_directory(path, 0777) && errno != EEXIST)
        return windrow_fail_system(WINDROW_RESOURCE, errno, "cannot make the directory %s", path);
    struct stat facts;
    if (stat(path, &facts) || !S_ISDIR(facts.st_mode))
        return windrow_fail(WINDROW_USAGE, "%s is in the way: it is not a directory", path);
    return WINDROW_OK;
}

enum windrow_status windrow_directory_sync(const char *path)
{
    int descriptor = windrow_files.open(path, O_RDONLY | O_DIRECTORY, 0);
    if (descriptor < 0)
        return windrow_fail_system(WINDROW_RESOURCE, errno, "cannot open the directory %s", path);
    enum windrow_status status = WINDROW_OK;
    if (windrow_files.sync(descriptor))
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot sync the directory %s", path);
    windrow_files.close(descriptor);
    return status;
}

static int remove_entry(const char *path, const struct stat *facts, int type, struct FTW *place)
{
    (void)facts;
    (void)type;
    (void)place;
    return remove(path);
}

enum windrow_status windrow_directory_remove(const char *path)
{
    struct stat facts;
    if (lstat(path, &facts) && errno == ENOENT)
        return WINDROW_OK;
    if (nftw(path, remove_entry, 32, FTW_DEPTH | FTW_PHYS))
        return windrow_fail_system(WINDROW_RESOURCE, errno, "cannot remove %s", path);
    return WINDROW_OK;
}

enum windrow_status windrow_file_remove(const char *path)
{
    if (windrow_files.unlink(path) && errno != ENOENT)
        return windrow_fail_system(WINDROW_RESOURCE, errno, "cannot remove %s", path);
    return WINDROW_OK;
}

static _Thread_local uint64_t counted_bytes;

static int count_entry(const char *path, const struct stat *facts, int type, struct FTW *place)
{
    (void)path;
    (void)place;
    if (type == FTW_F)
        counted_bytes += (uint64_t)facts->st_blocks * 512;
    return 0;
}

uint64_t windrow_directory_bytes(const char *path)
{
    counted_bytes = 0;
    nftw(path, count_entry, 32, FTW_PHYS);
    return counted_bytes;
}

uint64_t windrow_disk_free_bytes(const char *path)
{
    struct statvfs facts;
    if (statvfs(path, &facts))
        return UINT64_MAX;
    return (uint64_t)facts.f_bavail * facts.f_frsize;
}

uint64_t windrow_memory_peak_bytes(void)
{
    struct rusage usage;
    getrusage(RUSAGE_SELF, &usage);
    return (uint64_t)usage.ru_maxrss * 1024;
}

uint64_t windrow_memory_machine_bytes(void)
{
    return (uint64_t)sysconf(_SC_PHYS_PAGES) * (uint64_t)sysconf(_SC_PAGESIZE);
}
