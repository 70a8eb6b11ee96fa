/* answer: what top and score share: options about the output, and rows into a table. */
#ifndef TOOLS_ANSWER_H
#define TOOLS_ANSWER_H

#include "command.h"
#include "table.h"

struct answer_request {
    const char *command;
    const char *store;
    const char *run;
    const char *out;
    enum table_format format;
};

/* An argp child: --run, --format, --out, --quiet; its input is the request. */
extern const struct argp answer_argp;

/* Opens the run, saying so when it can still get better. Complains by itself. */
enum windrow_status answer_open(const struct answer_request *request, struct windrow_ranking **ranking);

#endif
