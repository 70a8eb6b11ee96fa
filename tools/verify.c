/* windrow verify: reads a store and its runs back. */
#include "command.h"
#include "progress.h"

#include <string.h>

enum { THREADS = OPTION_FIRST, QUIET };

static const struct argp_option options[] = {
    {"threads", THREADS, "N", 0, "Threads (default: as many as processors)", 0},
    {"quiet", QUIET, NULL, 0, "No progress, no summary", 0},
    {0},
};

struct request {
    const char *store;
    unsigned threads;
};

static error_t parse_option(int key, char *argument, struct argp_state *state)
{
    struct request *request = state->input;
    switch (key) {
    case THREADS: request->threads = (unsigned)count_value(argument, "threads", 1024, state); return 0;
    case QUIET: command_quiet = true; return 0;
    case ARGP_KEY_ARG:
        if (request->store)
            usage_error(state, "one store at a time");
        request->store = argument;
        return 0;
    case ARGP_KEY_END:
        if (!request->store)
            usage_error(state, "a store is missing");
        return 0;
    default: return ARGP_ERR_UNKNOWN;
    }
}

static void print_damage(void *context, const char *damage)
{
    uint64_t *count = context;
    ++*count;
    put_escaped(stdout, damage, strlen(damage));
    putchar('\n');
    fflush(stdout);
}

enum windrow_status verify_command(int argc, char **argv)
{
    static const struct argp parser = {.options = options, .parser = parse_option, .args_doc = "STORE",
                                       .doc = "Reads a store and all its runs back against checksums, counts and invariants, and writes a line for each damage.\v"
                                              "The exit code is 1 when there is any."};
    struct request request = {0};
    struct windrow_watch watch;
    uint64_t count = 0;
    argp_parse(&parser, argc, argv, 0, NULL, &request);
    progress_begin("verify", &watch);
    enum windrow_status status = windrow_verify(request.store, request.threads, print_damage, &count, &watch);
    progress_end();
    if (status == WINDROW_NO && count) {
        talk("verify", "%s: %s found, see standard output", request.store, count == 1 ? "one damage" : "several damages");
        return status;
    }
    if (!status)
        talk("verify", "%s: everything is as it was written", request.store);
    return finish("verify", status);
}
