#include "fault.h"

#include "windrow.h"

#include <fcntl.h>
#include <signal.h>
#include <stdbool.h>
#include <stdint.h>
#include <string.h>
#include <unistd.h>

/* All that follows runs in a signal handler: only system calls, no allocation. */

static void say(const char *text, size_t bytes)
{
    while (bytes) {
        ssize_t written = write(STDERR_FILENO, text, bytes);
        if (written <= 0)
            return;
        text += written;
        bytes -= (size_t)written;
    }
}

static uint64_t hexadecimal(const char **at)
{
    uint64_t value = 0;
    for (;; ++*at) {
        char digit = **at;
        if (digit >= '0' && digit <= '9')
            value = value * 16 + (uint64_t)(digit - '0');
        else if (digit >= 'a' && digit <= 'f')
            value = value * 16 + (uint64_t)(digit - 'a' + 10);
        else
            return value;
    }
}

/* A line of /proc/self/maps: begin-end access offset device inode   path. Says the path if the address lies in it. */
static bool say_if_inside(const char *line, uint64_t address)
{
    const char *at = line;
    uint64_t begin = hexadecimal(&at);
    if (*at++ != '-')
        return false;
    uint64_t end = hexadecimal(&at);
    const char *path = strchr(at, '/');
    if (address < begin || address >= end || !path)
        return false;
    say(path, strlen(path));
    return true;
}

static void say_file(uint64_t address)
{
    static char text[8192];
    size_t have = 0;
    int maps = open("/proc/self/maps", O_RDONLY | O_CLOEXEC);
    for (;;) {
        ssize_t got = maps < 0 ? 0 : read(maps, text + have, sizeof text - 1 - have);
        if (got <= 0)
            break;
        have += (size_t)got;
        text[have] = 0;
        char *line = text, *end;
        while ((end = strchr(line, '\n'))) {
            *end = 0;
            if (say_if_inside(line, address))
                return;
            line = end + 1;
        }
        have -= (size_t)(line - text);
        memmove(text, line, have);
    }
    say("a mapped file", strlen("a mapped file"));
}

static void on_bus_error(int signal_number, siginfo_t *facts, void *context)
{
    (void)signal_number;
    (void)context;
    static const char before[] = "windrow: cannot read ", after[] = " where it is mapped: it was cut, or its disk is full or failing\n";
    say(before, sizeof before - 1);
    say_file((uint64_t)(uintptr_t)facts->si_addr);
    say(after, sizeof after - 1);
    _exit(WINDROW_DAMAGED);
}

void fault_watch(void)
{
    struct sigaction action = {.sa_sigaction = on_bus_error, .sa_flags = SA_SIGINFO};
    sigemptyset(&action.sa_mask);
    sigaction(SIGBUS, &action, NULL);
}
