/* paths: the files that dump arguments stand for.
 *
 *   FILE, -     itself
 *   DIRECTORY   all its regular files but dot files, sorted bytewise; directories in it are not entered
 *   @FILE       what the lines of FILE name, one argument a line, but no further @FILE; ./@FILE is a file itself
 */
#ifndef WINDROW_DUMP_PATHS_H
#define WINDROW_DUMP_PATHS_H

#include "base/error.h"

#include <stddef.h>

struct windrow_dump_paths {
    char **paths;
    size_t count;
};

/* Expands arguments, in their order. A name that is no directory is taken as it is, whether it exists or not: who opens it
 * will say. WINDROW_INPUT for a directory without files, or a list or directory that cannot be read. */
enum windrow_status windrow_dump_paths_expand(const char *const *arguments, size_t count, struct windrow_dump_paths *paths);
void windrow_dump_paths_free(struct windrow_dump_paths *paths);

#endif
