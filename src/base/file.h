/* file: every touch of the file system goes through this room.
 *
 * The system calls stand in one table, windrow_files, so that a test can make any of them fail, tear
 * or lie. The rest are the few shapes in which we read and write:
 *   writer   a new file, written front to back, made durable by windrow_writer_finish()
 *   map      a whole file, mapped for reading
 *   replace  a small file, replaced so that a crash leaves the old or the new one, never a mix
 *
 * Durability: windrow_writer_finish() syncs the data; the name is durable only after
 * windrow_directory_sync() on its directory. Nothing is overwritten in place.
 * Threads: different objects may be used by different threads; one object by one thread at a time.
 */
#ifndef WINDROW_BASE_FILE_H
#define WINDROW_BASE_FILE_H

#include "base/error.h"

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <sys/stat.h>
#include <sys/types.h>

struct windrow_file_functions {
    int (*open)(const char *path, int flags, mode_t mode);
    int (*close)(int descriptor);
    ssize_t (*read)(int descriptor, void *bytes, size_t count);
    ssize_t (*read_at)(int descriptor, void *bytes, size_t count, off_t offset);
    ssize_t (*write)(int descriptor, const void *bytes, size_t count);
    ssize_t (*write_at)(int descriptor, const void *bytes, size_t count, off_t offset);
    int (*sync_data)(int descriptor);
    int (*sync)(int descriptor);
    int (*reserve)(int descriptor, off_t offset, off_t bytes); /* returns an error number, like posix_fallocate */
    int (*rename)(const char *from, const char *to);
    int (*unlink)(const char *path);
    int (*make_directory)(const char *path, mode_t mode);
};

/* The table in use: the system's own calls unless a test has put others there. */
extern struct windrow_file_functions windrow_files;

/* A growing block of memory, filled from the front. All zero is an empty one. */
struct windrow_buffer {
    uint8_t *data;
    size_t bytes;
    size_t capacity_bytes;
};

/* Makes room for `more` bytes behind the used ones. WINDROW_RESOURCE when memory is out. */
enum windrow_status windrow_buffer_reserve(struct windrow_buffer *buffer, size_t more);
enum windrow_status windrow_buffer_append(struct windrow_buffer *buffer, const void *data, size_t bytes);
void windrow_buffer_free(struct windrow_buffer *buffer);

/* A path made of a directory and a printf-style name; the caller frees it. NULL when memory is out. */
char *windrow_path(const char *directory, const char *name_format, ...) __attribute__((format(printf, 2, 3)));

struct windrow_writer {
    int descriptor;         /* -1 when not open */
    char *path;
    uint64_t written_bytes; /* including what is still buffered: the offset of the next byte */
    struct windrow_buffer pending;
    void *checksum;         /* running XXH3-64 of everything written, NULL when not asked for */
};

/* Creates (or empties) the file `path`. With `with_checksum`, windrow_writer_finish() hands out the
 * XXH3-64 of all bytes. All zero is a closed writer, on which windrow_writer_abandon() does nothing. */
enum windrow_status windrow_writer_open(struct windrow_writer *writer, const char *path, bool with_checksum);
enum windrow_status windrow_writer_append(struct windrow_writer *writer, const void *data, size_t bytes);
/* Flushes and syncs the data, leaving the writer open: the bytes so far are durable. */
enum windrow_status windrow_writer_sync(struct windrow_writer *writer);
/* Appends the XXH3-64 of everything written so far, 8 bytes, to a file that was opened with_checksum. */
enum windrow_status windrow_writer_seal(struct windrow_writer *writer);
/* Flushes, syncs and closes; `checksum` (may be NULL) receives the XXH3-64 when it was asked for. */
enum windrow_status windrow_writer_finish(struct windrow_writer *writer, uint64_t *checksum);
/* Flushes and closes without a sync: for scratch that no ledger names. */
enum windrow_status windrow_writer_close(struct windrow_writer *writer);
/* Closes without caring for the data; the file stays as it is. */
void windrow_writer_abandon(struct windrow_writer *writer);

struct windrow_map {
    const uint8_t *data; /* NULL for an empty file */
    uint64_t bytes;
    int descriptor;
};

/* Maps a whole file for reading. WINDROW_DAMAGED when it does not exist. */
enum windrow_status windrow_map_open(struct windrow_map *map, const char *path);
void windrow_map_close(struct windrow_map *map);

/* XXH3-64 of a whole file, read through a small buffer (nothing stays mapped). */
enum windrow_status windrow_file_checksum(const char *path, uint64_t *bytes, uint64_t *checksum);

/* Reads exactly `count` bytes at `offset`; a shorter file is WINDROW_DAMAGED, naming path and byte. */
enum windrow_status windrow_file_read_at(int descriptor, const char *path, void *bytes, size_t count, uint64_t offset);
enum windrow_status windrow_file_write_at(int descriptor, const char *path, const void *bytes, size_t count, uint64_t offset);

/* Replaces the small file `path`: written aside, synced, renamed, directory synced. */
enum windrow_status windrow_file_replace(const char *path, const void *bytes, size_t count);
/* Reads a small file whole (at most `most_bytes`); a missing one is WINDROW_NO. */
enum windrow_status windrow_file_load(const char *path, size_t most_bytes, struct windrow_buffer *out);

bool windrow_file_exists(const char *path);
enum windrow_status windrow_directory_make(const char *path); /* an existing one is fine */
enum windrow_status windrow_directory_sync(const char *path);
/* Removes a directory and all in it; a missing one is fine. Does not follow links. */
enum windrow_status windrow_directory_remove(const char *path);
enum windrow_status windrow_file_remove(const char *path); /* a missing one is fine */
/* Bytes of all files below `path`, as allocated on disk. */
uint64_t windrow_directory_bytes(const char *path);
/* Bytes that an ordinary user can still write on the file system of `path`. */
uint64_t windrow_disk_free_bytes(const char *path);

/* The process's peak resident memory in bytes, as the kernel counts it. */
uint64_t windrow_memory_peak_bytes(void);
/* The machine's memory in bytes. */
uint64_t windrow_memory_machine_bytes(void);

#endif
