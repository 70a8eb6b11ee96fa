/* windrow rank: starts, resumes or refines a run. */
#include "command.h"
#include "progress.h"

#include <string.h>

enum { RUN = OPTION_FIRST, BETA, DIGITS, ERROR, METHOD, MEMORY, THREADS, CHECKPOINT_EVERY, FRESH, QUIET };

static const struct argp_option options[] = {
    {"run", RUN, "NAME", 0, "Name of the run (default: main)", 0},
    {"beta", BETA, "SHARE", 0, "Damping: the chance to follow a link (default: 0.85)", 0},
    {"digits", DIGITS, "D", 0, "Digits of every score to prove (default: 6, without --error)", 0},
    {"error", ERROR, "E", 0, "Sum of all errors to prove at most", 0},
    {"method", METHOD, "mixed|power", 0, "mixed: Gauss-Seidel, host balance, Anderson mixing (default); power: plain power iteration, slow", 0},
    {"memory", MEMORY, "SIZE", 0, "Most memory to take", 0},
    {"threads", THREADS, "N", 0, "Threads (default: as many as processors)", 0},
    {"checkpoint-every", CHECKPOINT_EVERY, "TIME", 0, "Time between checkpoints (default: 5m)", 0},
    {"fresh", FRESH, NULL, 0, "Forget an earlier run of this name", 0},
    {"quiet", QUIET, NULL, 0, "No progress, no summary", 0},
    {0},
};

struct request {
    struct windrow_rank_options rank;
    bool digits_given;
};

static error_t parse_option(int key, char *argument, struct argp_state *state)
{
    struct request *request = state->input;
    struct windrow_rank_options *rank = &request->rank;
    switch (key) {
    case RUN: rank->run = argument; return 0;
    case MEMORY: rank->memory_bytes = size_value(argument, "memory", state); return 0;
    case THREADS: rank->threads = (unsigned)count_value(argument, "threads", 1024, state); return 0;
    case CHECKPOINT_EVERY: rank->checkpoint_seconds = seconds_value(argument, "checkpoint-every", state); return 0;
    case FRESH: rank->fresh = true; return 0;
    case QUIET: command_quiet = true; return 0;
    case BETA:
        rank->beta = number_value(argument, "beta", state);
        if (!(rank->beta > 0 && rank->beta < 1))
            usage_error(state, "--beta=%s: must lie between 0 and 1", argument);
        return 0;
    case DIGITS:
        rank->digits = number_value(argument, "digits", state);
        request->digits_given = true;
        if (!(rank->digits > 0))
            usage_error(state, "--digits=%s: must be more than 0", argument);
        return 0;
    case ERROR:
        rank->error = number_value(argument, "error", state);
        if (!(rank->error > 0))
            usage_error(state, "--error=%s: must be more than 0", argument);
        return 0;
    case METHOD:
        if (!strcmp(argument, "mixed"))
            rank->method = WINDROW_METHOD_MIXED;
        else if (!strcmp(argument, "power"))
            rank->method = WINDROW_METHOD_POWER;
        else
            usage_error(state, "--method=%s: mixed or power", argument);
        return 0;
    case ARGP_KEY_ARG:
        if (rank->store)
            usage_error(state, "one store at a time");
        rank->store = argument;
        return 0;
    case ARGP_KEY_END:
        if (!rank->store)
            usage_error(state, "a store is missing");
        if (rank->error > 0 && !request->digits_given)
            rank->digits = 0; /* the error asked for takes the place of the default digits */
        return 0;
    default: return ARGP_ERR_UNKNOWN;
    }
}

static void summarise(const struct windrow_rank_options *rank, bool already_done)
{
    struct windrow_standing standing;
    if (windrow_standing_read(rank->store, rank->run, &standing) || !standing.certified)
        return;
    if (already_done)
        talk("rank", "run %s has proven as much already; nothing was done", rank->run);
    talk("rank", "run %s: %s pages, %s links; %s digits of every score proven, error_l1 %.2e", rank->run,
         grouped(standing.pages), grouped(standing.links), proven_digits(standing.digits), standing.error_l1);
    talk("rank", "%s sweeps, %s link visits, %.1f s, peak memory %s MiB", grouped(standing.sweeps), grouped(standing.link_visits),
         standing.elapsed_seconds, grouped((standing.peak_memory_bytes + (1 << 20) - 1) >> 20));
}

enum windrow_status rank_command(int argc, char **argv)
{
    static const struct argp parser = {
        .options = options, .parser = parse_option, .args_doc = "STORE",
        .doc = "Scores every page of a store, or goes on where an interrupted run was, until the wanted digits are proven for every page.\v"
               "On a finished run, more digits go on from where it is. Sizes take K, M, G, T (powers of 1024), times s, m, h, ms."};
    struct request request = {0};
    windrow_rank_defaults(&request.rank);
    argp_parse(&parser, argc, argv, 0, NULL, &request);
    bool already_done = false;
    progress_begin("rank", &request.rank.watch);
    enum windrow_status status = windrow_rank(&request.rank, &already_done);
    progress_end();
    if (!status)
        summarise(&request.rank, already_done);
    return finish("rank", status);
}
