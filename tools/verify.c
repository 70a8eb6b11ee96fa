/* windrow verify: reads a store and its runs back. */
#include "command.h"
#include "progress.h"

#include <string.h>

enum { THREADS = OPTION_FIRST, SIZES, QUIET };

static const struct argp_option options[] = {
    {"threads", THREADS, "N", 0, "Threads (default: as many as processors)", 0},
    {"sizes", SIZES, NULL, 0, "Say what each part of the store takes, and verify nothing", 0},
    {"quiet", QUIET, NULL, 0, "No progress, no summary", 0},
    {0},
};

struct request {
    const char *store;
    unsigned threads;
    bool sizes;
};

static error_t parse_option(int key, char *argument, struct argp_state *state)
{
    struct request *request = state->input;
    switch (key) {
    case THREADS: request->threads = (unsigned)count_value(argument, "threads", 1024, state); return 0;
    case SIZES: request->sizes = true; return 0;
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

static enum windrow_status print_sizes(const char *store)
{
    struct windrow_store_sizes sizes;
    uint64_t links;
    enum windrow_status status = windrow_sizes_read(store, &sizes, &links);
    if (status)
        return status;
    const struct {
        const char *part;
        uint64_t bytes;
    } rows[] = {
        {"pages", sizes.page_bytes},           {"page index", sizes.page_index_bytes}, {"hosts", sizes.host_bytes},
        {"core map", sizes.core_map_bytes},    {"core links", sizes.core_link_bytes},  {"rim links", sizes.rim_link_bytes},
        {"degrees", sizes.degree_bytes},       {"aliases", sizes.alias_bytes},         {"manifest", sizes.manifest_bytes},
        {"all", sizes.all_bytes},
    };
    printf("part\tbytes\tbits_a_link\n");
    for (size_t row = 0; row < sizeof rows / sizeof rows[0]; row++)
        printf("%s\t%llu\t%.3f\n", rows[row].part, (unsigned long long)rows[row].bytes, links ? 8 * (double)rows[row].bytes / (double)links : 0);
    return WINDROW_OK;
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
    if (request.sizes)
        return finish("verify", print_sizes(request.store));
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
