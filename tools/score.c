/* windrow score: scores and places of named pages, or of all. */
#include "answer.h"

#include <stdlib.h>
#include <string.h>

enum { ALL = OPTION_FIRST, LINE_BYTES_MOST = 1 << 20 };

static const struct argp_option options[] = {
    {"all", ALL, NULL, 0, "Every page, in host order", 0},
    {0},
};

struct request {
    struct answer_request answer;
    bool all;
    char **urls;
    size_t url_count;
};

static error_t parse_option(int key, char *argument, struct argp_state *state)
{
    struct request *request = state->input;
    switch (key) {
    case ALL: request->all = true; return 0;
    case ARGP_KEY_INIT: state->child_inputs[0] = &request->answer; return 0;
    case ARGP_KEY_ARG:
        if (request->answer.store)
            return ARGP_ERR_UNKNOWN; /* the URLs: given whole, below */
        request->answer.store = argument;
        return 0;
    case ARGP_KEY_ARGS:
        request->urls = &state->argv[state->next];
        request->url_count = (size_t)(state->argc - state->next);
        return 0;
    case ARGP_KEY_END:
        if (!request->answer.store)
            usage_error(state, "a store is missing");
        if (request->all && request->url_count)
            usage_error(state, "--all leaves no page to be named");
        return 0;
    default: return ARGP_ERR_UNKNOWN;
    }
}

static enum windrow_status take_row(void *context, const struct windrow_row *row)
{
    struct table *table = context;
    table_text(table, row->url, row->url_bytes);
    table_count(table, row->place);
    table_range(table, row->range_first, row->range_last);
    table_number(table, row->score, 17);
    table_number(table, row->mean_multiple, 17);
    return table_state(table);
}

struct question {
    struct windrow_ranking *ranking;
    struct table *table;
    bool unknown; /* at least one URL was */
    bool said;    /* what failed has been said already */
};

static enum windrow_status ask(struct question *question, const char *url, size_t url_bytes)
{
    struct windrow_row row;
    bool folded = false;
    enum windrow_status status = windrow_ranking_score(question->ranking, url, url_bytes, &row, &folded);
    if (status == WINDROW_NO) {
        complain("score", "unknown: %.*s: %s", url_bytes < 4096 ? (int)url_bytes : 4096, url, windrow_message());
        question->unknown = true;
        return WINDROW_OK;
    }
    if (status)
        return status;
    if (folded)
        talk("score", "%.*s is an alias of %.*s", url_bytes < 4096 ? (int)url_bytes : 4096, url, (int)row.url_bytes, row.url);
    return take_row(question->table, &row);
}

/* Reads a line without its end. A line too long for any URL keeps its first bytes only. False at the end. */
static bool read_line(FILE *file, char *line, size_t *line_bytes)
{
    int byte;
    *line_bytes = 0;
    while ((byte = getc_unlocked(file)) != EOF && byte != '\n')
        if (*line_bytes < LINE_BYTES_MOST)
            line[(*line_bytes)++] = (char)byte;
    if (byte == EOF && !*line_bytes)
        return false;
    if (*line_bytes && line[*line_bytes - 1] == '\r')
        --*line_bytes;
    return true;
}

static enum windrow_status ask_lines(struct question *question)
{
    enum windrow_status status = WINDROW_OK;
    char *line = malloc(LINE_BYTES_MOST);
    size_t line_bytes;
    if (!line) {
        complain("score", "out of memory");
        question->said = true;
        return WINDROW_RESOURCE;
    }
    while (!status && read_line(stdin, line, &line_bytes))
        if (line_bytes) {
            status = ask(question, line, line_bytes);
            table_flush(question->table); /* whoever asks line by line waits for the answer */
        }
    if (!status && ferror(stdin)) {
        complain("score", "cannot read standard input");
        question->said = true;
        status = WINDROW_INPUT;
    }
    free(line);
    return status;
}

static enum windrow_status answer(const struct request *request, struct question *question)
{
    enum windrow_status status = WINDROW_OK;
    if (request->all)
        status = windrow_ranking_all(question->ranking, take_row, question->table);
    else if (!request->url_count || (request->url_count == 1 && !strcmp(request->urls[0], "-")))
        status = ask_lines(question);
    for (size_t i = 0; i < request->url_count && !status && strcmp(request->urls[0], "-"); i++)
        status = ask(question, request->urls[i], strlen(request->urls[i]));
    return status;
}

enum windrow_status score_command(int argc, char **argv)
{
    static const struct argp_child children[] = {{.argp = &answer_argp}, {0}};
    static const struct argp parser = {
        .options = options, .parser = parse_option, .args_doc = "STORE [URL...]", .children = children,
        .doc = "Writes the scores of named pages and their places in the whole crawl; without a URL they are read from standard input, one a line.\v"
               "range: the places that the proven error leaves possible. mean_multiple: 1 is the average page. "
               "An unknown URL is named on standard error; the exit code is 1 then."};
    static const char *const columns[] = {"url", "place", "range", "score", "mean_multiple"};
    struct request request = {.answer = {.command = "score"}};
    argp_parse(&parser, argc, argv, 0, NULL, &request);
    struct question question = {0};
    enum windrow_status status = answer_open(&request.answer, &question.ranking);
    if (status)
        return status;
    status = table_open("score", request.answer.out, request.answer.format, columns, 5, &question.table);
    if (!status) {
        status = answer(&request, &question);
        question.said |= table_state(question.table) != WINDROW_OK;
        enum windrow_status closed = table_close(question.table, !status);
        status = !status ? closed : question.said ? status : finish("score", status);
    }
    windrow_ranking_close(question.ranking);
    return !status && question.unknown ? WINDROW_NO : status;
}
