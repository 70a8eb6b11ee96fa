/* error: how every room reports failure.
 *
 * A function that can fail returns an enum windrow_status. The text that goes with a failure (what
 * failed, on which file, line or byte, and what the user can do) is kept once per thread: the place
 * that notices the failure writes it with windrow_fail(), callers on the way up may put context in
 * front with windrow_fail_within(), and the program prints it once, at the top.
 *
 * Threads: the message is thread-local. The crew (base/crew.h) carries the message of a failed task
 * to the thread that waits for it.
 */
#ifndef WINDROW_BASE_ERROR_H
#define WINDROW_BASE_ERROR_H

#include "windrow.h"

/* Longest message kept, terminator included; longer texts are cut. */
#define WINDROW_MESSAGE_BYTES 2048

/* Sets this thread's message and returns `status`, so that a failure is one line. */
enum windrow_status windrow_fail(enum windrow_status status, const char *format, ...)
    __attribute__((format(printf, 2, 3)));

/* Like windrow_fail(), with ": " and the text of the system's error number behind it. The status is
 * WINDROW_RESOURCE for a full disk, a quota or missing memory, otherwise `status`. */
enum windrow_status windrow_fail_system(enum windrow_status status, int error_number, const char *format, ...)
    __attribute__((format(printf, 3, 4)));

/* Puts context and ": " in front of this thread's message; returns `status` unchanged. */
enum windrow_status windrow_fail_within(enum windrow_status status, const char *format, ...)
    __attribute__((format(printf, 2, 3)));

/* Replaces this thread's message by a copy of `text`: how the crew hands a message over. */
void windrow_message_set(const char *text);

#endif
