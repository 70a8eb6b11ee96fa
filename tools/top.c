/* windrow top: the first pages of the crawl, or of each host or domain. */
#include "answer.h"

#include <string.h>

enum { PER = OPTION_FIRST, COUNT };

static const struct argp_option options[] = {
    {"per", PER, "all|host|domain", 0, "Of the whole crawl, each host, or each registered domain (default: all)", 0},
    {"count", COUNT, "K", 0, "How many (default: 10)", 0},
    {0},
};

struct request {
    struct answer_request answer;
    enum windrow_per per;
    uint64_t count;
};

static const char *const per_names[] = {[WINDROW_PER_ALL] = "all", [WINDROW_PER_HOST] = "host", [WINDROW_PER_DOMAIN] = "domain"};

static error_t parse_option(int key, char *argument, struct argp_state *state)
{
    struct request *request = state->input;
    switch (key) {
    case PER:
        for (size_t i = 0; i < sizeof per_names / sizeof per_names[0]; i++)
            if (!strcmp(argument, per_names[i])) {
                request->per = (enum windrow_per)i;
                return 0;
            }
        usage_error(state, "--per=%s: all, host or domain", argument);
        return 0;
    case COUNT: request->count = count_value(argument, "count", UINT64_MAX, state); return 0;
    case ARGP_KEY_INIT: state->child_inputs[0] = &request->answer; return 0;
    case ARGP_KEY_ARG:
        if (request->answer.store)
            usage_error(state, "one store at a time");
        request->answer.store = argument;
        return 0;
    case ARGP_KEY_END:
        if (!request->answer.store)
            usage_error(state, "a store is missing");
        return 0;
    default: return ARGP_ERR_UNKNOWN;
    }
}

static enum windrow_status take_row(void *context, const struct windrow_row *row)
{
    struct table *table = context;
    if (row->group)
        table_text(table, row->group, row->group_bytes);
    table_count(table, row->place);
    table_range(table, row->range_first, row->range_last);
    table_number(table, row->score, 17);
    table_number(table, row->mean_multiple, 17);
    table_text(table, row->url, row->url_bytes);
    return table_state(table);
}

enum windrow_status top_command(int argc, char **argv)
{
    static const struct argp_child children[] = {{.argp = &answer_argp}, {0}};
    static const struct argp parser = {
        .options = options, .parser = parse_option, .args_doc = "STORE", .children = children,
        .doc = "Writes the pages with the highest scores, in groups or over all, groups in host order.\v"
               "range: the places that the proven error leaves possible. mean_multiple: 1 is the average page."};
    struct request request = {.answer = {.command = "top"}, .count = 10};
    argp_parse(&parser, argc, argv, 0, NULL, &request);
    const char *columns[] = {per_names[request.per], "place", "range", "score", "mean_multiple", "url"};
    const bool grouped_rows = request.per != WINDROW_PER_ALL;
    struct windrow_ranking *ranking = NULL;
    struct table *table = NULL;
    enum windrow_status status = answer_open(&request.answer, &ranking);
    if (status)
        return status;
    status = table_open("top", request.answer.out, request.answer.format, grouped_rows ? columns : columns + 1, grouped_rows ? 6 : 5, &table);
    if (!status) {
        status = windrow_ranking_top(ranking, request.per, request.count, take_row, table);
        bool said = table_state(table) != WINDROW_OK;
        enum windrow_status closed = table_close(table, !status);
        status = !status ? closed : said ? status : finish("top", status);
    }
    windrow_ranking_close(ranking);
    return status;
}
