/* guard: memory whose last byte stands right before a page that must not be touched, so that reading one byte too far
 * faults at once, with or without a sanitizer. */
#ifndef TESTS_FUZZ_GUARD_H
#define TESTS_FUZZ_GUARD_H

#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>

struct guard {
    char *end; /* of the memory that may be touched */
    size_t capacity_bytes;
};

static inline struct guard guard_make(size_t capacity_bytes)
{
    size_t page = 4096, bytes = (capacity_bytes + page - 1) / page * page;
    char *memory = mmap(NULL, bytes + page, PROT_READ | PROT_WRITE, MAP_PRIVATE | MAP_ANONYMOUS, -1, 0);
    if (memory == MAP_FAILED || mprotect(memory + bytes, page, PROT_NONE) != 0)
        abort();
    return (struct guard){memory + bytes, bytes};
}

/* A copy of the text that ends at the guard page; at most capacity_bytes. */
static inline const char *guard_place(const struct guard *guard, const void *text, size_t bytes)
{
    if (bytes > 0)
        memcpy(guard->end - bytes, text, bytes);
    return guard->end - bytes;
}

#endif
