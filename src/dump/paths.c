#include "dump/paths.h"

#include "base/file.h"

#include <dirent.h>
#include <errno.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>

#define LIST_BYTES_MOST ((size_t)1 << 30)

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory for the names of dumps");
}

void windrow_dump_paths_free(struct windrow_dump_paths *paths)
{
    for (size_t index = 0; index < paths->count; index++)
        free(paths->paths[index]);
    free(paths->paths);
    *paths = (struct windrow_dump_paths){0};
}

/* Takes over `path`; NULL stands for missing memory. */
static enum windrow_status add(struct windrow_dump_paths *paths, char *path)
{
    if (!path)
        return memory();
    /* Room for twice as many at each power of two. */
    if ((paths->count & (paths->count - 1)) == 0) {
        char **larger = realloc(paths->paths, (paths->count ? 2 * paths->count : 1) * sizeof *larger);
        if (!larger) {
            free(path);
            return memory();
        }
        paths->paths = larger;
    }
    paths->paths[paths->count++] = path;
    return WINDROW_OK;
}

static int by_bytes(const void *a, const void *b)
{
    return strcmp(*(char *const *)a, *(char *const *)b);
}

static enum windrow_status add_directory(struct windrow_dump_paths *paths, const char *directory)
{
    enum windrow_status status = WINDROW_OK;
    size_t first = paths->count, length = strlen(directory);
    DIR *open = opendir(directory);
    if (!open)
        return windrow_fail_system(WINDROW_INPUT, errno, "cannot read the directory %s", directory);
    while (length > 1 && directory[length - 1] == '/')
        length--;
    for (;;) {
        errno = 0;
        struct dirent *entry = readdir(open);
        if (!entry) {
            if (errno)
                status = windrow_fail_system(WINDROW_INPUT, errno, "cannot read the directory %s", directory);
            break;
        }
        struct stat facts;
        if (entry->d_name[0] == '.')
            continue;
        char *path = NULL;
        if (asprintf(&path, "%.*s%s%s", (int)length, directory, directory[length - 1] == '/' ? "" : "/", entry->d_name) < 0) {
            status = memory();
            break;
        }
        if (stat(path, &facts) != 0 || !S_ISREG(facts.st_mode)) {
            free(path);
            continue;
        }
        if ((status = add(paths, path)))
            break;
    }
    closedir(open);
    if (!status && paths->count == first)
        status = windrow_fail(WINDROW_INPUT, "the directory %s holds no files", directory);
    if (!status)
        qsort(paths->paths + first, paths->count - first, sizeof *paths->paths, by_bytes);
    return status;
}

static enum windrow_status add_plain(struct windrow_dump_paths *paths, const char *path)
{
    struct stat facts;
    if (strcmp(path, "-") != 0 && stat(path, &facts) == 0 && S_ISDIR(facts.st_mode))
        return add_directory(paths, path);
    return add(paths, strdup(path));
}

static enum windrow_status add_list(struct windrow_dump_paths *paths, const char *list)
{
    struct windrow_buffer text = {0};
    enum windrow_status status = windrow_file_load(list, LIST_BYTES_MOST, &text);
    if (status == WINDROW_NO || status == WINDROW_DAMAGED)
        status = windrow_fail_within(WINDROW_INPUT, "reading the list of dumps @%s", list);
    if (!status)
        status = windrow_buffer_append(&text, "\n", 2); /* a newline and the end of the text */
    char *line = (char *)text.data;
    size_t first = paths->count;
    while (!status && *line) {
        char *end = strchr(line, '\n');
        if (!end) {
            status = windrow_fail(WINDROW_INPUT, "the list of dumps %s is no text: it holds a NUL byte", list);
            break;
        }
        char *next = end + 1;
        if (end > line && end[-1] == '\r')
            end--;
        *end = 0;
        if (*line)
            status = add_plain(paths, line);
        line = next;
    }
    if (!status && line != (char *)text.data + text.bytes - 1)
        status = windrow_fail(WINDROW_INPUT, "the list of dumps %s is no text: it holds a NUL byte", list);
    if (!status && paths->count == first)
        status = windrow_fail(WINDROW_INPUT, "the list of dumps %s names no file", list);
    windrow_buffer_free(&text);
    return status;
}

enum windrow_status windrow_dump_paths_expand(const char *const *arguments, size_t count, struct windrow_dump_paths *paths)
{
    *paths = (struct windrow_dump_paths){0};
    enum windrow_status status = WINDROW_OK;
    for (size_t index = 0; !status && index < count; index++)
        status = arguments[index][0] == '@' ? add_list(paths, arguments[index] + 1) : add_plain(paths, arguments[index]);
    if (status)
        windrow_dump_paths_free(paths);
    return status;
}
