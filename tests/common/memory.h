/* memory: allocation for tests. A test that gets no memory has nothing to say and ends at once. */
#ifndef TESTS_COMMON_MEMORY_H
#define TESTS_COMMON_MEMORY_H

#include <stddef.h>

/* Zeroed room for `count` objects of `object_bytes`; never NULL. Freed with free(). */
void *memory_array(size_t count, size_t object_bytes);

/* `old` grown or shrunk to `count` objects, like realloc(); never NULL. */
void *memory_resize(void *old, size_t count, size_t object_bytes);

/* A text made like printf() does. Freed with free(). */
char *memory_text(const char *format, ...) __attribute__((format(printf, 1, 2)));

#endif
