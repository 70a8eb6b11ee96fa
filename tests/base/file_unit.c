/* Files: what is written is there, in whatever portions the system takes it, and each call that fails is reported with
 * the status and the path, leaving nothing open and old files as they were. */
#include "base/file.h"

#include "../common/graph.h"
#include "../common/memory.h"
#include "../common/scratch.h"

#include <dirent.h>
#include <errno.h>
#include <fcntl.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>
#include <xxhash.h>

#include <cmocka.h>

/* ---- File functions that misbehave ---- */

static struct windrow_file_functions honest;
static struct {
    unsigned calls_left;   /* before the failure; UINT32_MAX: none */
    int error_number;
    unsigned interrupts;   /* every so many calls, EINTR first */
    size_t most;           /* bytes that a call moves; 0: as many as asked for */
    unsigned calls;
} trouble;

static bool fails(void)
{
    trouble.calls++;
    if (trouble.interrupts && trouble.calls % trouble.interrupts == 0) {
        errno = EINTR;
        return true;
    }
    if (trouble.calls_left != UINT32_MAX && trouble.calls_left-- == 0) {
        trouble.calls_left = UINT32_MAX;
        errno = trouble.error_number;
        return true;
    }
    return false;
}

static size_t portion(size_t count)
{
    return trouble.most && count > trouble.most ? trouble.most : count;
}

static ssize_t read_portion(int descriptor, void *bytes, size_t count) { return fails() ? -1 : honest.read(descriptor, bytes, portion(count)); }
static ssize_t write_portion(int descriptor, const void *bytes, size_t count) { return fails() ? -1 : honest.write(descriptor, bytes, portion(count)); }
static ssize_t read_portion_at(int descriptor, void *bytes, size_t count, off_t offset)
{
    return fails() ? -1 : honest.read_at(descriptor, bytes, portion(count), offset);
}
static ssize_t write_portion_at(int descriptor, const void *bytes, size_t count, off_t offset)
{
    return fails() ? -1 : honest.write_at(descriptor, bytes, portion(count), offset);
}
static ssize_t write_nothing(int descriptor, const void *bytes, size_t count) { (void)descriptor, (void)bytes, (void)count; return 0; }
static int open_failing(const char *path, int flags, mode_t mode) { return fails() ? -1 : honest.open(path, flags, mode); }
static int close_failing(int descriptor) { int result = honest.close(descriptor); return fails() ? -1 : result; }
static int sync_failing(int descriptor) { return fails() ? -1 : honest.sync(descriptor); }
static int rename_failing(const char *from, const char *to) { return fails() ? -1 : honest.rename(from, to); }
static int unlink_failing(const char *path) { return fails() ? -1 : honest.unlink(path); }
static int make_directory_failing(const char *path, mode_t mode) { return fails() ? -1 : honest.make_directory(path, mode); }

static unsigned open_descriptors(void)
{
    unsigned count = 0;
    DIR *listing = opendir("/proc/self/fd");
    assert_non_null(listing);
    while (readdir(listing))
        count++;
    closedir(listing);
    return count;
}

static char *directory, *path;
static unsigned descriptors;

static int set_up(void **state)
{
    (void)state;
    honest = windrow_files;
    memset(&trouble, 0, sizeof trouble);
    trouble.calls_left = UINT32_MAX;
    directory = scratch_make();
    path = scratch_path(directory, "file");
    descriptors = open_descriptors();
    return 0;
}

static int tear_down(void **state)
{
    (void)state;
    windrow_files = honest;
    assert_int_equal(open_descriptors(), descriptors);
    free(path);
    scratch_remove(directory);
    return 0;
}

static void expect_message(const char *text)
{
    if (!strstr(windrow_message(), text))
        fail_msg("\"%s\" is not in the message: %s", text, windrow_message());
}

/* ---- Writers ---- */

static uint8_t *bytes_make(size_t count)
{
    struct dice dice = {91};
    uint8_t *bytes = memory_array(count + 8, 1);
    for (size_t at = 0; at < count; at += 8)
        memcpy(bytes + at, &(uint64_t){dice_next(&dice)}, 8);
    return bytes;
}

static void write_in_portions(const uint8_t *bytes, size_t count, size_t step, uint64_t *checksum)
{
    struct windrow_writer writer;
    assert_int_equal(windrow_writer_open(&writer, path, true), WINDROW_OK);
    for (size_t at = 0; at < count; at += step) {
        assert_int_equal(writer.written_bytes, at);
        assert_int_equal(windrow_writer_append(&writer, bytes + at, count - at < step ? count - at : step), WINDROW_OK);
    }
    assert_int_equal(windrow_writer_append(&writer, NULL, 0), WINDROW_OK);
    assert_int_equal(windrow_writer_finish(&writer, checksum), WINDROW_OK);
    assert_int_equal(writer.descriptor, -1);
    windrow_writer_abandon(&writer); /* after the end, nothing is left to be abandoned */
}

static void test_writer(void **state)
{
    (void)state;
    static const size_t counts[] = {0, 1, 1000, 256 * 1024, 256 * 1024 + 1, 1500000}, steps[] = {1000, 256 * 1024, 700000, 4097};
    uint8_t *bytes = bytes_make(1500000);
    for (size_t count = 0; count < 6; count++)
        for (size_t step = 0; step < 4; step++) {
            uint64_t written, read, read_bytes;
            size_t file_bytes;
            windrow_files.write = step % 2 ? write_portion : honest.write;
            windrow_files.read = windrow_files.write == write_portion ? read_portion : honest.read;
            trouble.most = 3000;
            trouble.interrupts = 7;
            write_in_portions(bytes, counts[count], steps[step], &written);
            assert_int_equal(windrow_file_checksum(path, &read_bytes, &read), WINDROW_OK);
            assert_int_equal(read_bytes, counts[count]);
            assert_true(read == written && read == XXH3_64bits(bytes, counts[count]));
            char *file = scratch_read(path, &file_bytes);
            assert_int_equal(file_bytes, counts[count]);
            assert_memory_equal(file, bytes, file_bytes);
            free(file);
        }
    free(bytes);
}

static void test_writer_synced(void **state)
{
    (void)state;
    struct windrow_writer writer;
    scratch_write_text(path, "not this");
    assert_int_equal(windrow_writer_open(&writer, path, false), WINDROW_OK);
    assert_int_equal(windrow_writer_append(&writer, "keep this!", 10), WINDROW_OK);
    assert_int_equal(windrow_writer_sync(&writer), WINDROW_OK);
    char *text = scratch_read(path, NULL);
    assert_string_equal(text, "keep this!"); /* a sync flushes */
    free(text);
    assert_int_equal(windrow_writer_append(&writer, "!", 1), WINDROW_OK);
    assert_int_equal(windrow_writer_close(&writer), WINDROW_OK);
    text = scratch_read(path, NULL);
    assert_string_equal(text, "keep this!!");
    free(text);
}

/* The whole life of a writer, with one call of one kind failing. */
static enum windrow_status write_file(void)
{
    static const uint8_t bytes[600000];
    struct windrow_writer writer;
    enum windrow_status status = windrow_writer_open(&writer, path, true);
    if (!status)
        status = windrow_writer_append(&writer, bytes, 100);
    if (!status)
        status = windrow_writer_append(&writer, bytes, sizeof bytes);
    if (!status)
        status = windrow_writer_append(&writer, bytes, 100);
    if (!status)
        status = windrow_writer_finish(&writer, NULL);
    windrow_writer_abandon(&writer);
    return status;
}

static void test_writer_failures(void **state)
{
    (void)state;
    static const int errors[] = {ENOSPC, EIO, EDQUOT};
    for (int kind = 0; kind < 4; kind++)
        for (unsigned call = 0; call < 3; call++) {
            windrow_files = honest;
            windrow_files.open = kind == 0 ? open_failing : honest.open;
            windrow_files.write = kind == 1 ? write_portion : honest.write;
            windrow_files.sync_data = kind == 2 ? sync_failing : honest.sync_data;
            windrow_files.close = kind == 3 ? close_failing : honest.close;
            trouble.calls_left = call;
            trouble.error_number = errors[call];
            trouble.calls = 0;
            enum windrow_status status = write_file();
            if (trouble.calls_left != UINT32_MAX)
                continue; /* there were fewer calls than that */
            assert_int_equal(status, WINDROW_RESOURCE);
            expect_message(path);
            expect_message(strerror(errors[call]));
        }
    windrow_files = honest;
    windrow_files.write = write_nothing;
    assert_int_equal(write_file(), WINDROW_RESOURCE); /* a disk that takes no byte does not hang us */
    assert_int_equal(unlink(path), 0);
    assert_int_equal(mkdir(path, 0777), 0);
    windrow_files = honest;
    assert_int_equal(write_file(), WINDROW_RESOURCE);
    expect_message(path);
}

/* ---- Replacing and loading ---- */

static void expect_text(const char *text)
{
    char *found = scratch_read(path, NULL);
    assert_string_equal(found, text);
    free(found);
}

static void test_replace(void **state)
{
    (void)state;
    assert_int_equal(windrow_file_replace(path, "old", 3), WINDROW_OK);
    expect_text("old");
    assert_int_equal(windrow_file_replace(path, "newer", 5), WINDROW_OK);
    expect_text("newer");
    /* Each call fails in turn: the file is the old one until the rename, the new one behind it. */
    for (unsigned call = 0;; call++) {
        windrow_files = (struct windrow_file_functions){
            .open = open_failing, .close = honest.close, .read = honest.read, .read_at = honest.read_at, .write = write_portion,
            .write_at = honest.write_at, .sync_data = sync_failing, .sync = sync_failing, .reserve = honest.reserve,
            .rename = rename_failing, .unlink = honest.unlink, .make_directory = honest.make_directory};
        trouble.calls_left = call;
        trouble.error_number = EIO;
        trouble.calls = 0;
        enum windrow_status status = windrow_file_replace(path, "newest", 6);
        windrow_files = honest;
        if (trouble.calls_left != UINT32_MAX) {
            assert_int_equal(status, WINDROW_OK);
            assert_int_equal(call, 6); /* open, write, sync, rename, open the directory, sync it */
            break;
        }
        assert_int_equal(status, WINDROW_RESOURCE);
        expect_text(call < 4 ? "newer" : "newest");
    }
    /* In the current directory, where a path has no slash. */
    char *before = getcwd(NULL, 0);
    assert_int_equal(chdir(directory), 0);
    assert_int_equal(windrow_file_replace("file", "here", 4), WINDROW_OK);
    assert_int_equal(chdir(before), 0);
    free(before);
    expect_text("here");
}

static void test_load(void **state)
{
    (void)state;
    struct windrow_buffer buffer = {0};
    assert_int_equal(windrow_file_load(path, 10, &buffer), WINDROW_NO);
    expect_message(path);
    scratch_write_text(path, "0123456789");
    windrow_files.read = read_portion;
    trouble.most = 3;
    trouble.interrupts = 2;
    assert_int_equal(windrow_file_load(path, 10, &buffer), WINDROW_OK);
    assert_int_equal(buffer.bytes, 10);
    assert_memory_equal(buffer.data, "0123456789", 10);
    assert_int_equal(windrow_file_load(path, 9, &buffer), WINDROW_DAMAGED);
    trouble = (typeof(trouble)){.calls_left = 1, .most = 3, .error_number = EIO};
    assert_int_equal(windrow_file_load(path, 10, &buffer), WINDROW_DAMAGED);
    expect_message(strerror(EIO));
    windrow_buffer_free(&buffer);
}

static void test_read_and_write_at(void **state)
{
    (void)state;
    char found[7] = "";
    scratch_write_text(path, "0123456789");
    int descriptor = open(path, O_RDWR);
    windrow_files.read_at = read_portion_at;
    windrow_files.write_at = write_portion_at;
    trouble.most = 2;
    trouble.interrupts = 3;
    assert_int_equal(windrow_file_read_at(descriptor, path, found, 6, 2), WINDROW_OK);
    assert_string_equal(found, "234567");
    assert_int_equal(windrow_file_read_at(descriptor, path, found, 6, 5), WINDROW_DAMAGED);
    expect_message("ends at byte 10, 1 bytes too early");
    assert_int_equal(windrow_file_write_at(descriptor, path, "abcdef", 6, 8), WINDROW_OK);
    assert_int_equal(windrow_file_read_at(descriptor, path, found, 6, 8), WINDROW_OK);
    assert_string_equal(found, "abcdef");
    trouble = (typeof(trouble)){.calls_left = 1, .most = 2, .error_number = ENOSPC};
    assert_int_equal(windrow_file_write_at(descriptor, path, "abcdef", 6, 0), WINDROW_RESOURCE);
    close(descriptor);
}

/* ---- Maps, directories, buffers ---- */

static void test_map(void **state)
{
    (void)state;
    struct windrow_map map;
    assert_int_equal(windrow_map_open(&map, path), WINDROW_DAMAGED);
    expect_message(path);
    windrow_map_close(&map);
    scratch_write_text(path, "mapped");
    assert_int_equal(windrow_map_open(&map, path), WINDROW_OK);
    assert_int_equal(map.bytes, 6);
    assert_memory_equal(map.data, "mapped", 6);
    windrow_map_close(&map);
    windrow_map_close(&map); /* twice does no harm */
    scratch_write_text(path, "");
    assert_int_equal(windrow_map_open(&map, path), WINDROW_OK);
    assert_int_equal(map.bytes, 0);
    assert_null(map.data);
    windrow_map_close(&map);
}

static void test_directories(void **state)
{
    (void)state;
    char *inner = scratch_path(directory, "a"), *deep = scratch_path(directory, "a/b"), *file = scratch_path(directory, "a/b/c"),
         *link = scratch_path(directory, "a/link");
    assert_int_equal(windrow_directory_make(deep), WINDROW_RESOURCE); /* not its parents */
    assert_int_equal(windrow_directory_make(inner), WINDROW_OK);
    assert_int_equal(windrow_directory_make(inner), WINDROW_OK);
    assert_int_equal(windrow_directory_make(deep), WINDROW_OK);
    scratch_write_text(file, "");
    assert_int_equal(windrow_directory_make(file), WINDROW_USAGE);
    assert_true(windrow_file_exists(file));
    scratch_write_text(path, "outside");
    assert_int_equal(symlink(path, link), 0);
    assert_int_equal(windrow_directory_sync(inner), WINDROW_OK);
    assert_int_equal(windrow_directory_remove(inner), WINDROW_OK);
    assert_false(windrow_file_exists(inner));
    expect_text("outside"); /* links are not followed */
    assert_int_equal(windrow_directory_remove(inner), WINDROW_OK);
    assert_int_equal(windrow_directory_sync(inner), WINDROW_RESOURCE);
    assert_int_equal(windrow_file_remove(path), WINDROW_OK);
    assert_int_equal(windrow_file_remove(path), WINDROW_OK);
    windrow_files.unlink = unlink_failing;
    windrow_files.make_directory = make_directory_failing;
    trouble.error_number = EACCES;
    trouble.calls_left = 0;
    assert_int_equal(windrow_file_remove(path), WINDROW_RESOURCE);
    trouble.calls_left = 0;
    assert_int_equal(windrow_directory_make(inner), WINDROW_RESOURCE);
    free(inner);
    free(deep);
    free(file);
    free(link);
}

static void test_directory_bytes(void **state)
{
    (void)state;
    uint64_t before = windrow_directory_bytes(directory);
    uint8_t *bytes = bytes_make(100000);
    scratch_write(path, bytes, 100000);
    int descriptor = open(path, O_RDWR);
    fsync(descriptor); /* so that the blocks are there to be counted */
    close(descriptor);
    uint64_t more = windrow_directory_bytes(directory) - before;
    assert_true(more >= 100000 && more < 200000);
    free(bytes);
    assert_int_equal(windrow_directory_bytes("/nowhere at all"), 0);
}

static void test_buffer(void **state)
{
    (void)state;
    struct windrow_buffer buffer = {0};
    struct dice dice = {92};
    uint8_t *bytes = bytes_make(300000);
    size_t at = 0;
    while (at < 200000) {
        size_t count = dice_below(&dice, dice_below(&dice, 20) ? 100 : 50000);
        assert_int_equal(windrow_buffer_append(&buffer, bytes + at, count), WINDROW_OK);
        at += count;
        assert_int_equal(buffer.bytes, at);
        assert_true(buffer.capacity_bytes >= at);
    }
    assert_memory_equal(buffer.data, bytes, at);
    assert_int_equal(windrow_buffer_reserve(&buffer, 10000), WINDROW_OK);
    assert_true(buffer.capacity_bytes - buffer.bytes >= 10000);
    assert_int_equal(windrow_buffer_reserve(&buffer, SIZE_MAX - 10), WINDROW_RESOURCE); /* the sum is beyond all numbers */
    assert_int_equal(windrow_buffer_reserve(&buffer, SIZE_MAX / 2), WINDROW_RESOURCE);
    assert_memory_equal(buffer.data, bytes, at);
    windrow_buffer_free(&buffer);
    assert_null(buffer.data);
    free(bytes);
}

static void test_path(void **state)
{
    (void)state;
    char *found = windrow_path("a", "b-%03d", 7);
    assert_string_equal(found, "a/b-007");
    free(found);
    char name[1000];
    memset(name, 'n', sizeof name - 1);
    name[sizeof name - 1] = 0;
    found = windrow_path("a", "%s", name);
    assert_int_equal(strlen(found), 2 + sizeof name - 1); /* a long name is not cut to another file's */
    free(found);
}

int main(void)
{
#define TEST(name) cmocka_unit_test_setup_teardown(name, set_up, tear_down)
    const struct CMUnitTest tests[] = {
        TEST(test_writer), TEST(test_writer_synced), TEST(test_writer_failures), TEST(test_replace), TEST(test_load), TEST(test_read_and_write_at),
        TEST(test_map), TEST(test_directories), TEST(test_directory_bytes), TEST(test_buffer), TEST(test_path),
    };
    return cmocka_run_group_tests_name("file", tests, NULL, NULL);
}
