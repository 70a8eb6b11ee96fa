/* corpus: runs a fuzz target over its committed inputs, as a plain regression test. */
#ifndef TESTS_FUZZ_CORPUS_H
#define TESTS_FUZZ_CORPUS_H

#include <dirent.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

typedef int (*corpus_target)(const uint8_t *data, size_t bytes);

/* Runs every file of corpus/`name` beside the source file `here` (__FILE__), whole and cut by one byte at each end.
 * Returns the number of files. */
static inline size_t corpus_run(const char *here, const char *name, corpus_target target)
{
    char path[4096];
    const char *slash = strrchr(here, '/');
    int base = snprintf(path, sizeof path, "%.*scorpus/%s/", slash != NULL ? (int)(slash - here) + 1 : 0, here, name);
    DIR *directory = opendir(path);
    if (directory == NULL)
        return 0;
    size_t count = 0;
    for (struct dirent *entry; (entry = readdir(directory)) != NULL;) {
        if (entry->d_name[0] == '.')
            continue;
        snprintf(path + base, sizeof path - (size_t)base, "%s", entry->d_name);
        FILE *file = fopen(path, "rb");
        static uint8_t data[1 << 20];
        size_t bytes = file != NULL ? fread(data, 1, sizeof data, file) : 0;
        if (file == NULL)
            abort();
        fclose(file);
        target(data, bytes);
        if (bytes > 0) {
            target(data, bytes - 1);
            target(data + 1, bytes - 1);
        }
        count++;
    }
    closedir(directory);
    return count;
}

#endif
