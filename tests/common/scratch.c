#include "scratch.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdint.h>
#include <cmocka.h>
#include <errno.h>
#include <ftw.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

#include "memory.h"
#include "program.h"

char *scratch_make(void)
{
    const char *parent = getenv("TMPDIR");
    char *directory = memory_text("%s/windrow-test-XXXXXX", parent != NULL && *parent != '\0' ? parent : "/tmp");
    if (mkdtemp(directory) == NULL)
        fail_msg("%s: %s", directory, strerror(errno));
    return directory;
}

static int remove_entry(const char *path, const struct stat *status, int type, struct FTW *place)
{
    (void)status, (void)type, (void)place;
    return remove(path);
}

void scratch_remove(char *directory)
{
    if (directory != NULL)
        nftw(directory, remove_entry, 16, FTW_DEPTH | FTW_PHYS);
    free(directory);
}

char *scratch_path(const char *directory, const char *name)
{
    return memory_text("%s/%s", directory, name);
}

bool scratch_exists(const char *path)
{
    struct stat status;
    return lstat(path, &status) == 0;
}

static FILE *open_file(const char *path, const char *mode)
{
    FILE *file = fopen(path, mode);
    if (file == NULL)
        fail_msg("%s: %s", path, strerror(errno));
    return file;
}

void scratch_write(const char *path, const void *bytes, size_t byte_count)
{
    FILE *file = open_file(path, "wb");
    size_t written = byte_count > 0 ? fwrite(bytes, 1, byte_count, file) : 0;
    if (fclose(file) != 0 || written != byte_count)
        fail_msg("%s: cannot be written", path);
}

void scratch_write_text(const char *path, const char *text)
{
    scratch_write(path, text, strlen(text));
}

char *scratch_read(const char *path, size_t *byte_count)
{
    FILE *file = open_file(path, "rb");
    fseek(file, 0, SEEK_END);
    size_t size = (size_t)ftell(file);
    rewind(file);
    char *bytes = memory_array(size + 1, 1);
    size_t got = fread(bytes, 1, size, file);
    fclose(file);
    if (got != size)
        fail_msg("%s: cannot be read", path);
    if (byte_count != NULL)
        *byte_count = size;
    return bytes;
}

void scratch_damage(const char *path, size_t offset)
{
    FILE *file = open_file(path, "r+b");
    fseek(file, (long)offset, SEEK_SET);
    int byte = fgetc(file);
    if (byte == EOF)
        fail_msg("%s has no byte %zu", path, offset);
    fseek(file, (long)offset, SEEK_SET);
    fputc(byte ^ 0x10, file);
    fclose(file);
}

void scratch_cut(const char *path, size_t byte_count)
{
    if (truncate(path, (off_t)byte_count) != 0)
        fail_msg("%s: %s", path, strerror(errno));
}

void scratch_copy(const char *from, const char *to)
{
    struct outcome outcome = RUN("cp", "-a", from, to);
    outcome_expect(&outcome, 0);
    outcome_free(&outcome);
}

/* nftw() hands its callback nothing of ours, hence this one variable. */
static struct {
    struct scratch_listing listing;
    size_t prefix_bytes;
} walk;

static int list_entry(const char *path, const struct stat *status, int type, struct FTW *place)
{
    (void)place;
    struct scratch_listing *listing = &walk.listing;
    if (type != FTW_F)
        return 0;
    listing->paths = memory_resize(listing->paths, listing->count + 1, sizeof *listing->paths);
    listing->file_bytes = memory_resize(listing->file_bytes, listing->count + 1, sizeof *listing->file_bytes);
    listing->paths[listing->count] = memory_text("%s", path + walk.prefix_bytes);
    listing->file_bytes[listing->count++] = (size_t)status->st_size;
    return 0;
}

struct scratch_listing scratch_list(const char *directory)
{
    memset(&walk, 0, sizeof walk);
    walk.prefix_bytes = strlen(directory) + 1;
    if (nftw(directory, list_entry, 16, FTW_PHYS) != 0)
        fail_msg("%s: cannot be listed", directory);
    struct scratch_listing *listing = &walk.listing;
    for (size_t i = 1; i < listing->count; i++) /* a handful of files: insertion sort keeps pairs together */
        for (size_t j = i; j > 0 && strcmp(listing->paths[j - 1], listing->paths[j]) > 0; j--) {
            char *path = listing->paths[j];
            size_t bytes = listing->file_bytes[j];
            listing->paths[j] = listing->paths[j - 1];
            listing->file_bytes[j] = listing->file_bytes[j - 1];
            listing->paths[j - 1] = path;
            listing->file_bytes[j - 1] = bytes;
        }
    return *listing;
}

void scratch_listing_free(struct scratch_listing *listing)
{
    for (size_t i = 0; i < listing->count; i++)
        free(listing->paths[i]);
    free(listing->paths);
    free(listing->file_bytes);
    *listing = (struct scratch_listing){0};
}

static bool belongs_to_job(const char *path)
{
    return strstr(path, "ledger") != NULL || strstr(path, "log") != NULL || strstr(path, "lock") != NULL;
}

/* The listing without the job's own files. */
static struct scratch_listing content(const char *store)
{
    struct scratch_listing all = scratch_list(store);
    size_t kept = 0;
    for (size_t i = 0; i < all.count; i++) {
        if (belongs_to_job(all.paths[i])) {
            free(all.paths[i]);
            continue;
        }
        all.file_bytes[kept] = all.file_bytes[i];
        all.paths[kept++] = all.paths[i];
    }
    all.count = kept;
    return all;
}

static char *content_of(const char *store, const char *path, size_t *byte_count)
{
    char *full = scratch_path(store, path);
    char *bytes = NULL;
    const char *name = strrchr(path, '/');
    if (strcmp(name != NULL ? name + 1 : path, "data.mdb") == 0) {
        *strrchr(full, '/') = '\0';
        struct outcome outcome = RUN("mdb_dump", full);
        outcome_expect(&outcome, 0);
        bytes = outcome.out;
        *byte_count = outcome.out_bytes;
        outcome.out = NULL;
        outcome_free(&outcome);
    } else {
        bytes = scratch_read(full, byte_count);
    }
    free(full);
    return bytes;
}

void scratch_expect_same_store(const char *store_a, const char *store_b)
{
    struct scratch_listing a = content(store_a), b = content(store_b);
    for (size_t i = 0; i < a.count || i < b.count; i++) {
        const char *path_a = i < a.count ? a.paths[i] : "(nothing)";
        const char *path_b = i < b.count ? b.paths[i] : "(nothing)";
        if (strcmp(path_a, path_b) != 0)
            fail_msg("%s holds %s where %s holds %s", store_a, path_a, store_b, path_b);
        size_t bytes_a, bytes_b;
        char *content_a = content_of(store_a, path_a, &bytes_a), *content_b = content_of(store_b, path_b, &bytes_b);
        size_t same = 0;
        while (same < bytes_a && same < bytes_b && content_a[same] == content_b[same])
            same++;
        if (same < bytes_a || same < bytes_b)
            fail_msg("%s differs between %s (%zu bytes) and %s (%zu bytes) at byte %zu", path_a, store_a, bytes_a,
                     store_b, bytes_b, same);
        free(content_a);
        free(content_b);
    }
    if (a.count == 0)
        fail_msg("%s holds no files to compare", store_a);
    scratch_listing_free(&a);
    scratch_listing_free(&b);
}
