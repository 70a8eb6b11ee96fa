#include "program.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdint.h>
#include <cmocka.h>
#include <errno.h>
#include <fcntl.h>
#include <limits.h>
#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/wait.h>
#include <time.h>
#include <unistd.h>

#include "memory.h"

#define LONGEST_RUN_SECONDS 300

const char *program_build_directory(void)
{
    static char directory[PATH_MAX];
    if (directory[0] == '\0') {
        ssize_t length = readlink("/proc/self/exe", directory, sizeof directory - 1);
        if (length <= 0)
            fail_msg("/proc/self/exe: %s", strerror(errno));
        for (int level = 0; level < 3; level++) /* BUILD/tests/ROOM/name_run */
            *strrchr(directory, '/') = '\0';
    }
    return directory;
}

static char *executable(const char *name)
{
    if (strcmp(name, "windrow") == 0 || strcmp(name, "crawlgen") == 0)
        return memory_text("%s/%s", program_build_directory(), name);
    return memory_text("%s", name);
}

static int open_or_null(const char *path, int flags)
{
    return open(path != NULL ? path : "/dev/null", flags | O_CLOEXEC, 0666);
}

/* In the child: never returns. */
static void become(int in, int out, int err, const char *const *arguments)
{
    char *path = executable(arguments[0]);
    if (in < 0 || dup2(in, 0) < 0 || dup2(out, 1) < 0 || dup2(err, 2) < 0) {
        perror(path);
        _exit(127);
    }
    alarm(LONGEST_RUN_SECONDS); /* an alarm outlives exec */
    execvp(path, (char *const *)arguments);
    perror(path);
    _exit(127);
}

static pid_t start(int in, int out, int err, const char *const *arguments)
{
    fflush(NULL);
    pid_t process = fork();
    if (process == 0)
        become(in, out, err, arguments);
    if (process < 0)
        fail_msg("fork: %s", strerror(errno));
    return process;
}

pid_t program_start(const char *input_path, const char *out_path, const char *err_path, const char *const *arguments)
{
    int in = open_or_null(input_path, O_RDONLY);
    int out = open_or_null(out_path, O_WRONLY | O_CREAT | O_TRUNC);
    int err = open_or_null(err_path, O_WRONLY | O_CREAT | O_TRUNC);
    pid_t process = start(in, out, err, arguments);
    close(in);
    close(out);
    close(err);
    return process;
}

int program_wait(pid_t process)
{
    int status;
    while (waitpid(process, &status, 0) < 0)
        if (errno != EINTR)
            fail_msg("waitpid: %s", strerror(errno));
    return WIFSIGNALED(status) ? -WTERMSIG(status) : WEXITSTATUS(status);
}

static char *read_back(FILE *file, size_t *byte_count)
{
    fseek(file, 0, SEEK_END);
    *byte_count = (size_t)ftell(file);
    rewind(file);
    char *bytes = memory_array(*byte_count + 1, 1);
    if (fread(bytes, 1, *byte_count, file) != *byte_count)
        fail_msg("the program's output cannot be read back");
    fclose(file);
    return bytes;
}

struct outcome program_run(const char *input_path, const char *const *arguments)
{
    struct outcome outcome = {.arguments = arguments};
    FILE *out = tmpfile(), *err = tmpfile();
    int in = open_or_null(input_path, O_RDONLY);
    if (out == NULL || err == NULL || in < 0)
        fail_msg("%s: %s", input_path != NULL ? input_path : "a temporary file", strerror(errno));
    outcome.exit_code = program_wait(start(in, fileno(out), fileno(err), arguments));
    close(in);
    outcome.out = read_back(out, &outcome.out_bytes);
    outcome.err = read_back(err, &outcome.err_bytes);
    return outcome;
}

void outcome_free(struct outcome *outcome)
{
    free(outcome->out);
    free(outcome->err);
    *outcome = (struct outcome){0};
}

static void print_command(const struct outcome *outcome)
{
    for (size_t i = 0; outcome->arguments[i] != NULL; i++)
        fprintf(stderr, "%s%s", i > 0 ? " " : "", outcome->arguments[i]);
    fputc('\n', stderr);
}

void outcome_expect(const struct outcome *outcome, int exit_code)
{
    if (outcome->exit_code == exit_code)
        return;
    print_command(outcome);
    fail_msg("%s %d, expected %d; it said: %.1500s", outcome->exit_code < 0 ? "ended by a signal, " : "exit code",
             outcome->exit_code, exit_code, outcome->err);
}

void outcome_expect_talk(const struct outcome *outcome, const char *text)
{
    if (strstr(outcome->err, text) != NULL)
        return;
    print_command(outcome);
    fail_msg("\"%s\" is missing from what it said: %.1500s", text, outcome->err);
}

void program_must(const char *input_path, const char *const *arguments)
{
    struct outcome outcome = program_run(input_path, arguments);
    outcome_expect(&outcome, 0);
    outcome_free(&outcome);
}

void program_pause(double seconds)
{
    struct timespec rest = {(time_t)seconds, (long)((seconds - (double)(time_t)seconds) * 1e9)};
    while (nanosleep(&rest, &rest) < 0 && errno == EINTR)
        continue;
}

double program_clock_seconds(void)
{
    struct timespec now;
    clock_gettime(CLOCK_MONOTONIC, &now);
    return (double)now.tv_sec + (double)now.tv_nsec * 1e-9;
}
