/* Reading dump files through every compression, and noticing what is wrong with them. The inputs are made here with
 * libarchive's and libzstd's own compressors. */
#include "dump/stream.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <archive.h>
#include <archive_entry.h>
#include <cmocka.h>
#include <unistd.h>
#include <zstd.h>

struct text {
    char *bytes;
    size_t count;
};

static char path[] = "/tmp/windrow-stream-XXXXXX";
static struct text plain; /* more than one block of the reader, as lines */

static int input_make(void **state)
{
    (void)state;
    int descriptor = mkstemp(path);
    if (descriptor < 0)
        return -1;
    close(descriptor);
    plain.bytes = malloc(800000);
    srandom(1);
    while (plain.count < 600000)
        plain.count += (size_t)sprintf(plain.bytes + plain.count, "http://host-%ld.example/%ld\thttp://host-%ld.example/\n",
                                       random() % 1000, random(), random() % 1000);
    return 0;
}

static int input_drop(void **state)
{
    (void)state;
    free(plain.bytes);
    return unlink(path);
}

static void file_write(const struct text *parts, size_t part_count)
{
    FILE *file = fopen(path, "wb");
    assert_non_null(file);
    for (size_t i = 0; i < part_count; i++)
        assert_int_equal(fwrite(parts[i].bytes, 1, parts[i].count, file), parts[i].count);
    assert_int_equal(fclose(file), 0);
}

/* Reads the file whole, with reads of uneven sizes. */
static enum windrow_status file_read(struct text *out)
{
    atomic_uint_fast64_t consumed = 0;
    struct windrow_stream *stream;
    *out = (struct text){malloc(5000000), 0};
    enum windrow_status status = windrow_stream_open(path, &consumed, &stream);
    for (size_t got = 1, round = 0; status == WINDROW_OK && got > 0; round++) {
        size_t room = round % 3 == 0 ? 1000 : 300000;
        assert_true(out->count + room <= 5000000);
        status = windrow_stream_read(stream, out->bytes + out->count, room, &got);
        out->count += got;
    }
    if (status == WINDROW_OK) {
        size_t got = 1;
        assert_int_equal(windrow_stream_read(stream, out->bytes, 1, &got), WINDROW_OK);
        assert_int_equal(got, 0);
        FILE *file = fopen(path, "rb");
        fseek(file, 0, SEEK_END);
        assert_int_equal(consumed, ftell(file));
        fclose(file);
    }
    windrow_stream_close(stream);
    return status;
}

static void expect_text(const struct text *parts, size_t part_count)
{
    struct text got;
    enum windrow_status status = file_read(&got);
    if (status != WINDROW_OK)
        fail_msg("%s", windrow_message());
    size_t at = 0;
    for (size_t i = 0; i < part_count; at += parts[i++].count) {
        assert_true(got.count - at >= parts[i].count);
        assert_memory_equal(got.bytes + at, parts[i].bytes, parts[i].count);
    }
    assert_int_equal(got.count, at);
    free(got.bytes);
}

static void expect_input_error(const char *what)
{
    struct text got;
    enum windrow_status status = file_read(&got);
    free(got.bytes);
    if (status != WINDROW_INPUT)
        fail_msg("%s: status %d", what, status);
    /* File and byte are named. */
    assert_non_null(strstr(windrow_message(), path));
    assert_non_null(strstr(windrow_message(), "byte "));
}

static struct text compress(const char *filter, const struct text *text)
{
    struct text out = {malloc(4000000), 0};
    struct archive *archive = archive_write_new();
    assert_int_equal(archive_write_add_filter_by_name(archive, filter), ARCHIVE_OK);
    assert_int_equal(archive_write_set_format_raw(archive), ARCHIVE_OK);
    archive_write_set_bytes_in_last_block(archive, 1);
    assert_int_equal(archive_write_open_memory(archive, out.bytes, 4000000, &out.count), ARCHIVE_OK);
    struct archive_entry *entry = archive_entry_new();
    archive_entry_set_pathname(entry, "dump");
    archive_entry_set_filetype(entry, AE_IFREG);
    assert_int_equal(archive_write_header(archive, entry), ARCHIVE_OK);
    assert_int_equal(archive_write_data(archive, text->bytes, text->count), text->count);
    archive_entry_free(entry);
    assert_int_equal(archive_write_close(archive), ARCHIVE_OK);
    archive_write_free(archive);
    return out;
}

static const char *const filters[] = {"gzip", "zstd", "bzip2", "xz", "lz4"};
enum { FILTERS = sizeof filters / sizeof *filters };

static void plain_text_comes_as_it_is(void **state)
{
    (void)state;
    file_write(&plain, 1);
    expect_text(&plain, 1);
    static const char *const short_texts[] = {"", "x", "\n", "BZ", "BZh is how this line begins\n", "\x1F", "\x28\xB5\x2F"};
    for (size_t i = 0; i < sizeof short_texts / sizeof *short_texts; i++) {
        struct text text = {(char *)short_texts[i], strlen(short_texts[i])};
        file_write(&text, 1);
        expect_text(&text, 1);
    }
}

static void each_compression_is_read(void **state)
{
    (void)state;
    for (size_t i = 0; i < FILTERS; i++) {
        struct text packed = compress(filters[i], &plain);
        assert_true(packed.count < plain.count);
        file_write(&packed, 1);
        expect_text(&plain, 1);
        free(packed.bytes);
    }
}

static void several_members_are_one_text(void **state)
{
    (void)state;
    /* RFC 1952 section 2.2 for gzip, RFC 8878 section 3 for zstd. */
    struct text other = {"http://other.example/\n", 22}, nothing = {"", 0};
    for (size_t i = 0; i < FILTERS; i++) {
        struct text parts[] = {compress(filters[i], &plain), compress(filters[i], &other), compress(filters[i], &plain)};
        file_write(parts, 3);
        expect_text((struct text[]){plain, other, plain}, 3);
        for (size_t part = 0; part < 3; part++)
            free(parts[part].bytes);
    }
    struct text parts[] = {compress("gzip", &nothing), compress("gzip", &other)};
    file_write(parts, 2);
    expect_text(&other, 1);
    free(parts[0].bytes);
    free(parts[1].bytes);
}

static void compressed_nothing_is_nothing(void **state)
{
    (void)state;
    struct text nothing = {"", 0};
    static const struct text packed[] = {
        {"\x1F\x8B\x08\0\0\0\0\0\0\x03\x03\0\0\0\0\0\0\0\0\0", 20},
        {"\x28\xB5\x2F\xFD\x24\0\x01\0\0\x99\xE9\xD8\x51", 13},
        {"BZh9\x17\x72\x45\x38\x50\x90\0\0\0\0", 14},
        {"\xFD" "7zXZ\0\0\x04\xE6\xD6\xB4\x46\0\0\0\0\x1C\xDF\x44\x21\x1F\xB6\xF3\x7D\x01\0\0\0\0\x04YZ", 32},
        {"\x04\x22\x4D\x18\x64\x40\xA7\0\0\0\0\x05\x5D\xCC\x02", 15},
    };
    for (size_t i = 0; i < FILTERS; i++) {
        file_write(&packed[i], 1);
        expect_text(&nothing, 1);
    }
}

static void skippable_zstd_frames_are_skipped(void **state)
{
    (void)state;
    /* RFC 8878 section 3.1.2: magic number 0x184D2A50 to 0x184D2A5F, then the size. */
    struct text skipped = {"\x5A\x2A\x4D\x18\x05\0\0\0hello", 13}, packed = compress("zstd", &plain);
    struct text parts[] = {skipped, packed, skipped, skipped, packed, skipped};
    file_write(parts, 6);
    expect_text((struct text[]){plain, plain}, 2);
    free(packed.bytes);
}

static struct text compress_window(int window_log)
{
    struct text out = {malloc(4000000), 0};
    ZSTD_CCtx *context = ZSTD_createCCtx();
    ZSTD_CCtx_setParameter(context, ZSTD_c_enableLongDistanceMatching, 1);
    ZSTD_CCtx_setParameter(context, ZSTD_c_windowLog, window_log);
    ZSTD_inBuffer input = {plain.bytes, plain.count, 0};
    ZSTD_outBuffer output = {out.bytes, 4000000, 0};
    /* In two steps, so that the frame cannot know its size and asks for the whole window. */
    while (input.pos < input.size)
        assert_false(ZSTD_isError(ZSTD_compressStream2(context, &output, &input, ZSTD_e_continue)));
    assert_int_equal(ZSTD_compressStream2(context, &output, &input, ZSTD_e_end), 0);
    out.count = output.pos;
    ZSTD_freeCCtx(context);
    return out;
}

static void zstd_windows_up_to_128_mib_are_read(void **state)
{
    (void)state;
    struct text packed = compress_window(27);
    file_write(&packed, 1);
    expect_text(&plain, 1);
    free(packed.bytes);
    packed = compress_window(28);
    file_write(&packed, 1);
    expect_input_error("a window of 256 MiB");
    free(packed.bytes);
}

static void truncated_files_are_noticed(void **state)
{
    (void)state;
    for (size_t i = 0; i < FILTERS; i++) {
        struct text packed = compress(filters[i], &plain);
        size_t cuts[] = {packed.count / 2, packed.count - 1, packed.count - 3, 20};
        for (size_t cut = 0; cut < 4; cut++) {
            struct text part = {packed.bytes, cuts[cut]};
            file_write(&part, 1);
            expect_input_error(filters[i]);
        }
        free(packed.bytes);
    }
}

static void garbage_behind_the_end_is_noticed(void **state)
{
    (void)state;
    struct text garbage = {"garbage", 7};
    for (size_t i = 0; i < FILTERS; i++) {
        struct text parts[] = {compress(filters[i], &plain), garbage};
        file_write(parts, 2);
        expect_input_error(filters[i]);
        free(parts[0].bytes);
    }
    struct text parts[] = {{"\x1F\x8B\x08\0\0\0\0\0\0\x03\x03\0\0\0\0\0\0\0\0\0", 20}, garbage};
    file_write(parts, 2);
    expect_input_error("behind nothing");
    /* A gzip member with a long file name, which ends where a block of 256 KiB ends. */
    enum { BLOCK_BYTES = 256 << 10 };
    struct text member = {malloc(BLOCK_BYTES), BLOCK_BYTES};
    memset(member.bytes, 'n', BLOCK_BYTES);
    memcpy(member.bytes, "\x1F\x8B\x08\x08\0\0\0\0\0\x03", 10);
    memcpy(member.bytes + BLOCK_BYTES - 11, "\0\x03\0\0\0\0\0\0\0\0\0", 11);
    file_write(&member, 1);
    expect_text(&member, 0);
    file_write((struct text[]){member, garbage}, 2);
    expect_input_error("behind a block");
    free(member.bytes);
}

static void damage_is_noticed_or_harmless(void **state)
{
    (void)state;
    srandom(9);
    for (size_t i = 0; i < FILTERS; i++) {
        struct text packed = compress(filters[i], &plain);
        bool checked = strcmp(filters[i], "gzip") != 0 && strcmp(filters[i], "zstd") != 0 && strcmp(filters[i], "lz4") != 0;
        for (int round = 0; round < 10; round++) {
            size_t at = (size_t)random() % packed.count;
            packed.bytes[at] ^= 0x10;
            file_write(&packed, 1);
            struct text got;
            enum windrow_status status = file_read(&got);
            assert_true(status == WINDROW_OK || status == WINDROW_INPUT);
            /* bzip2 and xz always bear checksums that libarchive's libraries look at. */
            if (checked && status == WINDROW_OK) {
                assert_int_equal(got.count, plain.count);
                assert_memory_equal(got.bytes, plain.bytes, plain.count);
            }
            free(got.bytes);
            packed.bytes[at] ^= 0x10;
        }
        free(packed.bytes);
    }
}

static void missing_files_and_directories_are_named(void **state)
{
    (void)state;
    atomic_uint_fast64_t consumed = 0;
    struct windrow_stream *stream;
    assert_int_equal(windrow_stream_open("/nowhere/at-all", &consumed, &stream), WINDROW_INPUT);
    assert_null(stream);
    assert_non_null(strstr(windrow_message(), "/nowhere/at-all"));
    assert_int_equal(windrow_stream_open("/tmp", &consumed, &stream), WINDROW_INPUT);
    assert_null(stream);
    windrow_stream_close(NULL);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(plain_text_comes_as_it_is),
        cmocka_unit_test(each_compression_is_read),
        cmocka_unit_test(several_members_are_one_text),
        cmocka_unit_test(compressed_nothing_is_nothing),
        cmocka_unit_test(skippable_zstd_frames_are_skipped),
        cmocka_unit_test(zstd_windows_up_to_128_mib_are_read),
        cmocka_unit_test(truncated_files_are_noticed),
        cmocka_unit_test(garbage_behind_the_end_is_noticed),
        cmocka_unit_test(damage_is_noticed_or_harmless),
        cmocka_unit_test(missing_files_and_directories_are_named),
    };
    return cmocka_run_group_tests(tests, input_make, input_drop);
}
