/* windrow status: how a store and its run stand, for people or for programs. */
#include "command.h"

#include <jansson.h>
#include <stdlib.h>
#include <string.h>

enum { RUN = OPTION_FIRST, JSON, QUIET };

static const struct argp_option options[] = {
    {"run", RUN, "NAME", 0, "Which run (default: main)", 0},
    {"json", JSON, NULL, 0, "One JSON object; what is not known yet is null", 0},
    {"quiet", QUIET, NULL, 0, "No talk on standard error but errors", 0},
    {0},
};

struct request {
    const char *store;
    const char *run;
    bool json;
};

static error_t parse_option(int key, char *argument, struct argp_state *state)
{
    struct request *request = state->input;
    switch (key) {
    case RUN: request->run = argument; return 0;
    case JSON: request->json = true; return 0;
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

static json_t *count_or_null(bool known, uint64_t count)
{
    return known ? json_integer((json_int_t)count) : json_null();
}

static json_t *number_or_null(bool known, double number)
{
    json_t *value = known ? json_real(number) : NULL; /* none for infinities and what is no number */
    return value ? value : json_null();
}

static enum windrow_status print_json(const struct windrow_standing *standing)
{
    const bool sharded = standing->sharded, begun = standing->begun, certified = standing->certified;
    json_t *object = json_object(), *dropped = sharded ? json_object() : json_null();
    const struct {
        const char *key;
        json_t *value;
    } members[] = {
        {"state", json_string(windrow_state_names[standing->state])},
        {"pages", count_or_null(sharded, standing->pages)},
        {"crawled_pages", count_or_null(sharded, standing->crawled_pages)},
        {"dangling_pages", count_or_null(sharded, standing->dangling_pages)},
        {"links", count_or_null(sharded, standing->links)},
        {"hosts", count_or_null(sharded, standing->hosts)},
        {"core_pages", count_or_null(sharded, standing->core_pages)},
        {"core_links", count_or_null(sharded, standing->core_links)},
        {"sweeps", count_or_null(begun, standing->sweeps)},
        {"link_visits", count_or_null(begun, standing->link_visits)},
        {"error_l1", number_or_null(certified, standing->error_l1)},
        {"alpha", number_or_null(certified, standing->alpha)},
        {"rho", number_or_null(certified, standing->rho)},
        {"digits", number_or_null(certified, standing->digits)},
        {"elapsed_seconds", number_or_null(sharded, standing->elapsed_seconds)},
        {"seconds_left", number_or_null(standing->seconds_left >= 0, standing->seconds_left)},
        {"peak_memory_bytes", count_or_null(standing->peak_memory_bytes > 0, standing->peak_memory_bytes)},
        {"store_bytes", count_or_null(true, standing->store_bytes)},
        {"link_bits", number_or_null(sharded && standing->links > 0, standing->link_bits)},
        {"dropped", dropped},
        {"stage", standing->stage ? json_string(standing->stage) : json_null()},
        {"stage_share", number_or_null(standing->stage_share >= 0, standing->stage_share)},
    };
    for (int i = 0; i < WINDROW_DROP_COUNT && sharded; i++)
        json_object_set_new(dropped, windrow_drop_names[i], json_integer((json_int_t)standing->dropped[i]));
    int failed = 0;
    for (size_t i = 0; i < sizeof members / sizeof members[0]; i++)
        failed |= json_object_set_new(object, members[i].key, members[i].value);
    failed = failed || json_dumpf(object, stdout, JSON_INDENT(2) | JSON_REAL_PRECISION(17)) || putchar('\n') == EOF;
    json_decref(object);
    if (failed) {
        complain("status", "cannot write the status: out of memory or of room for standard output");
        return WINDROW_RESOURCE;
    }
    return WINDROW_OK;
}

static void print_plain(const struct windrow_standing *standing)
{
    printf("state           %s\n", windrow_state_names[standing->state]);
    if (standing->stage)
        printf("stage           %s", standing->stage);
    if (standing->stage && standing->stage_share >= 0)
        printf(", %.0f %% of it done", 100 * standing->stage_share);
    if (standing->stage)
        printf("\n");
    if (standing->sharded) {
        printf("pages           %s, %s of them crawled, %s dangling\n", grouped(standing->pages), grouped(standing->crawled_pages),
               grouped(standing->dangling_pages));
        printf("hosts           %s\n", grouped(standing->hosts));
        printf("links           %s, %.2f bits each\n", grouped(standing->links), standing->link_bits);
        printf("core            %s pages, %s links\n", grouped(standing->core_pages), grouped(standing->core_links));
        printf("dropped        ");
        for (int i = 0; i < WINDROW_DROP_COUNT; i++)
            printf("%s %s %s", i ? "," : "", grouped(standing->dropped[i]), windrow_drop_names[i]);
        printf("\n");
    }
    if (standing->begun)
        printf("work            %s sweeps, %s link visits\n", grouped(standing->sweeps), grouped(standing->link_visits));
    if (standing->certified)
        printf("proven          %s digits of every score; error_l1 %.3g, alpha %.3g, rho %.3g\n", proven_digits(standing->digits), standing->error_l1,
               standing->alpha, standing->rho);
    if (standing->sharded)
        printf("elapsed         %.1f s\n", standing->elapsed_seconds);
    if (standing->state != WINDROW_STATE_FINISHED && standing->state != WINDROW_STATE_SHARDED) {
        if (standing->seconds_left >= 0)
            printf("left            %.0f s\n", standing->seconds_left);
        else
            printf("left            not known\n");
    }
    if (standing->peak_memory_bytes)
        printf("peak memory     %s bytes\n", grouped(standing->peak_memory_bytes));
    printf("on disk         %s bytes\n", grouped(standing->store_bytes));
    if (standing->state == WINDROW_STATE_STOPPED)
        printf("Run the same %s command again to go on.\n", standing->sharded ? "rank" : "shard");
}

enum windrow_status status_command(int argc, char **argv)
{
    static const struct argp parser = {.options = options, .parser = parse_option, .args_doc = "STORE",
                                       .doc = "Tells how a store and its run stand, also while a job works on them."};
    struct request request = {0};
    struct windrow_standing standing;
    argp_parse(&parser, argc, argv, 0, NULL, &request);
    enum windrow_status status = windrow_standing_read(request.store, request.run, &standing);
    if (status)
        return finish("status", status);
    if (request.json)
        status = print_json(&standing);
    else
        print_plain(&standing);
    if (fflush(stdout) && !status) {
        complain("status", "cannot write to standard output");
        status = WINDROW_RESOURCE;
    }
    return status;
}
