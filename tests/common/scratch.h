/* scratch: directories and files of a test. Anything that goes wrong here fails the running test.
 *
 * Paths and contents that are handed out are owned by the caller and freed with free(). */
#ifndef TESTS_COMMON_SCRATCH_H
#define TESTS_COMMON_SCRATCH_H

#include <stdbool.h>
#include <stddef.h>

/* A new empty directory below $TMPDIR (or /tmp). */
char *scratch_make(void);
/* Removes a directory with all that is in it, and frees the path. */
void scratch_remove(char *directory);

/* directory/name, freed by the caller. */
char *scratch_path(const char *directory, const char *name);

bool scratch_exists(const char *path);
void scratch_write(const char *path, const void *bytes, size_t byte_count);
void scratch_write_text(const char *path, const char *text);
/* The file's bytes with a '\0' behind them. `byte_count` may be NULL. */
char *scratch_read(const char *path, size_t *byte_count);

/* Turns over one bit of the byte at `offset`. */
void scratch_damage(const char *path, size_t offset);
/* Cuts the file to `byte_count` bytes. */
void scratch_cut(const char *path, size_t byte_count);
/* Copies a directory with all that is in it. */
void scratch_copy(const char *from, const char *to);

/* The regular files below a directory as paths relative to it, sorted. */
struct scratch_listing {
    char **paths;
    size_t *file_bytes;
    size_t count;
};
struct scratch_listing scratch_list(const char *directory);
void scratch_listing_free(struct scratch_listing *listing);

/* Fails the test unless two stores hold the same bytes: every file but those of the job itself (a
 * ledger, a log, a lock). LMDB environments are compared by what mdb_dump says of them, since free
 * pages inside the file are not content. */
void scratch_expect_same_store(const char *store_a, const char *store_b);

#endif
