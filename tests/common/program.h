/* program: runs a built program (or a tool of the system) and keeps what it said.
 *
 * A test binary stands in BUILD/tests/ROOM/; `windrow`, `crawlgen` and the tests' own tools are
 * found from there. Every other name is looked up in PATH. A run that takes longer than five minutes
 * is ended by SIGALRM, so that a hang is a failed test and not a hung one.
 */
#ifndef TESTS_COMMON_PROGRAM_H
#define TESTS_COMMON_PROGRAM_H

#include <stddef.h>
#include <sys/types.h>

struct outcome {
    int exit_code; /* minus the signal's number when a signal ended the program */
    char *out;     /* standard output and standard error, with a '\0' behind each */
    size_t out_bytes;
    char *err;
    size_t err_bytes;
    const char *const *arguments; /* as given: for messages */
};

/* Runs arguments[0] with the rest (a NULL ends them), standard input from `input_path` (NULL: empty). */
struct outcome program_run(const char *input_path, const char *const *arguments);
void outcome_free(struct outcome *outcome);

/* RUN("zstd", "-t", path) and WINDROW("score", store, "--all"). */
#define ARGUMENTS(...) ((const char *const[]){__VA_ARGS__, NULL})
#define RUN(...) program_run(NULL, ARGUMENTS(__VA_ARGS__))
#define WINDROW(...) program_run(NULL, ARGUMENTS("windrow", __VA_ARGS__))
#define WINDROW_FROM(input_path, ...) program_run(input_path, ARGUMENTS("windrow", __VA_ARGS__))

/* Fails the test, showing what the program said, unless it ended with this exit code. */
void outcome_expect(const struct outcome *outcome, int exit_code);
/* Fails the test unless standard error holds the text. */
void outcome_expect_talk(const struct outcome *outcome, const char *text);

/* Runs, expects exit code 0, and forgets what was said. */
void program_must(const char *input_path, const char *const *arguments);
#define MUST(...) program_must(NULL, ARGUMENTS(__VA_ARGS__))
#define MUST_WINDROW(...) program_must(NULL, ARGUMENTS("windrow", __VA_ARGS__))

/* Starts without waiting, input from `input_path`, output into the files named (NULL: nowhere);
 * program_wait() gives the exit code as in struct outcome. */
pid_t program_start(const char *input_path, const char *out_path, const char *err_path, const char *const *arguments);
int program_wait(pid_t process);

/* The build directory that this test stands in; valid for the life of the process. */
const char *program_build_directory(void);

/* Sleeps. */
void program_pause(double seconds);
/* Seconds on a clock that only goes forward. */
double program_clock_seconds(void);

#endif
