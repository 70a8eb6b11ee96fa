/* windrow: the program. Finds the command and hands it its arguments. */
#include "command.h"
#include "fault.h"

#include <stdlib.h>
#include <string.h>

struct command {
    const char *name;
    enum windrow_status (*run)(int argc, char **argv);
    const char *summary;
};

static const struct command commands[] = {
    {"plan", plan_command, "what a full job on some dumps will take"},
    {"shard", shard_command, "raw link dumps to a store"},
    {"rank", rank_command, "a store to scores with a proven error"},
    {"status", status_command, "how far a job is"},
    {"top", top_command, "the first pages of the crawl, or of each host or domain"},
    {"score", score_command, "scores and places of named pages, or of all"},
    {"verify", verify_command, "reads everything back against checksums and counts"},
};
enum { COMMANDS = sizeof commands / sizeof commands[0] };

const char *argp_program_version = "windrow " WINDROW_VERSION;

static const struct command *command_named(const char *name)
{
    for (size_t i = 0; i < COMMANDS; i++)
        if (!strcmp(commands[i].name, name))
            return &commands[i];
    return NULL;
}

/* Stops at the command: what follows is the command's own. */
static error_t parse_option(int key, char *argument, struct argp_state *state)
{
    const struct command **command = state->input;
    switch (key) {
    case ARGP_KEY_ARG:
        *command = command_named(argument);
        if (!*command)
            usage_error(state, "there is no command \"%s\"", argument);
        state->next = state->argc;
        return 0;
    case ARGP_KEY_NO_ARGS:
        usage_error(state, "a command is missing");
        return 0;
    default:
        return ARGP_ERR_UNKNOWN;
    }
}

static char *list_commands(int key, const char *text, void *input)
{
    (void)input;
    if (key != ARGP_KEY_HELP_POST_DOC)
        return (char *)text;
    char *list = NULL;
    size_t list_bytes = 0;
    FILE *memory = open_memstream(&list, &list_bytes);
    if (!memory)
        return (char *)text;
    fputs("Commands:\n", memory);
    for (size_t i = 0; i < COMMANDS; i++)
        fprintf(memory, "  %-8s %s\n", commands[i].name, commands[i].summary);
    fputs("\n`windrow COMMAND --help' tells a command's options.\n\n"
          "Exit codes:\n"
          "  0  done\n"
          "  1  the answer is no: damage found, URL unknown, not ranked yet\n"
          "  2  usage\n"
          "  3  input unusable\n"
          "  4  store or ledger damaged\n"
          "  5  out of disk, memory budget or another resource\n"
          "  6  stopped at a checkpoint, run again to go on\n"
          "  70 a bug of ours", memory);
    fclose(memory);
    return list;
}

int main(int argc, char **argv)
{
    fault_watch();
    const struct command *command = NULL;
    const struct argp program = {.parser = parse_option, .args_doc = "COMMAND [ARGUMENT...]", .help_filter = list_commands,
                                 .doc = "Link-based scores for every page of a crawl that is larger than memory."
                                        "\v "};
    argp_err_exit_status = WINDROW_USAGE;
    char name[] = "windrow";
    argv[0] = name;
    argp_parse(&program, argc, argv, ARGP_IN_ORDER, NULL, &command);
    int first = 1;
    while (strcmp(argv[first], command->name))
        first++;
    char whole_name[64];
    snprintf(whole_name, sizeof whole_name, "windrow %s", command->name);
    argv[first] = whole_name;
    return command->run(argc - first, argv + first);
}
