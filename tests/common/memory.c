#include "memory.h"

#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>

static void *checked(void *memory)
{
    if (memory == NULL) {
        fputs("the test is out of memory\n", stderr);
        abort();
    }
    return memory;
}

void *memory_array(size_t count, size_t object_bytes)
{
    return checked(calloc(count > 0 ? count : 1, object_bytes));
}

void *memory_resize(void *old, size_t count, size_t object_bytes)
{
    return checked(reallocarray(old, count > 0 ? count : 1, object_bytes));
}

char *memory_text(const char *format, ...)
{
    char *text = NULL;
    va_list arguments;
    va_start(arguments, format);
    int length = vasprintf(&text, format, arguments);
    va_end(arguments);
    return checked(length < 0 ? NULL : text);
}
