#include "answer.h"

enum { RUN = OPTION_FIRST + 1000, FORMAT, OUT, QUIET };

static const struct argp_option options[] = {
    {"run", RUN, "NAME", 0, "Which run (default: main)", 1},
    {"format", FORMAT, "tsv|csv|jsonl", 0, "Shape of the rows (default: tsv)", 1},
    {"out", OUT, "FILE", 0, "Write there instead of standard output; .gz and .zst are compressed", 1},
    {"quiet", QUIET, NULL, 0, "No talk on standard error but errors", 1},
    {0},
};

static error_t parse_option(int key, char *argument, struct argp_state *state)
{
    struct answer_request *request = state->input;
    switch (key) {
    case RUN: request->run = argument; return 0;
    case OUT: request->out = argument; return 0;
    case QUIET: command_quiet = true; return 0;
    case FORMAT:
        if (!table_format_named(argument, &request->format))
            usage_error(state, "--format=%s: tsv, csv or jsonl", argument);
        return 0;
    default: return ARGP_ERR_UNKNOWN;
    }
}

const struct argp answer_argp = {.options = options, .parser = parse_option};

enum windrow_status answer_open(const struct answer_request *request, struct windrow_ranking **ranking)
{
    enum windrow_status status = windrow_ranking_open(request->store, request->run, ranking);
    if (status)
        return finish(request->command, status);
    struct windrow_ranking_facts facts = windrow_ranking_facts(*ranking);
    if (!facts.finished)
        talk(request->command, "the run is not finished: these scores have %s proven digits so far", proven_digits(facts.digits));
    return WINDROW_OK;
}
