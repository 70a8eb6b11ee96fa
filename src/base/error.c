#include "base/error.h"

#include <errno.h>
#include <stdarg.h>
#include <stdio.h>
#include <string.h>

static _Thread_local char message[WINDROW_MESSAGE_BYTES];

enum windrow_status windrow_fail(enum windrow_status status, const char *format, ...)
{
    /* Formatted aside first: an argument may be the old message itself. */
    char text[WINDROW_MESSAGE_BYTES];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(text, sizeof text, format, arguments);
    va_end(arguments);
    memcpy(message, text, sizeof message);
    return status;
}

enum windrow_status windrow_fail_system(enum windrow_status status, int error_number, const char *format, ...)
{
    char text[WINDROW_MESSAGE_BYTES / 2];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(text, sizeof text, format, arguments);
    va_end(arguments);
    char reason[128];
    const char *reason_text = strerror_r(error_number, reason, sizeof reason);
    bool full = error_number == ENOSPC || error_number == EDQUOT;
    snprintf(message, sizeof message, "%s: %s%s", text, reason_text, full ? "; make room and run the same command again" : "");
    switch (error_number) {
    case ENOSPC: case EDQUOT: case ENOMEM: case EMFILE: case ENFILE: case EFBIG:
        return WINDROW_RESOURCE;
    default:
        return status;
    }
}

enum windrow_status windrow_fail_within(enum windrow_status status, const char *format, ...)
{
    char text[WINDROW_MESSAGE_BYTES];
    va_list arguments;
    va_start(arguments, format);
    int written = vsnprintf(text, sizeof text, format, arguments);
    va_end(arguments);
    size_t used = written < 0 ? 0 : (size_t)written < sizeof text ? (size_t)written : sizeof text - 1;
    snprintf(text + used, sizeof text - used, ": %.*s", (int)(sizeof text - 4), message);
    memcpy(message, text, sizeof message);
    return status;
}

const char *windrow_message(void)
{
    return message;
}

void windrow_message_set(const char *text)
{
    windrow_fail(WINDROW_OK, "%s", text);
}
