/* windrow shard: dumps to store. */
#include "command.h"
#include "progress.h"

#include <string.h>

enum { MEMORY = OPTION_FIRST, THREADS, TEMPORARY, SHAPE, NAMES, NOFOLLOW, ALIASES, ADD, DROP, SUGGEST, BAD_MAX, OUT, QUIET };

static const char *suggest_path; /* where alias candidates go; NULL: they are only counted */

static const struct argp_option options[] = {
    {"out", OUT, "STORE", 0, "The store's directory, made when missing", 0},
    {"memory", MEMORY, "SIZE", 0, "Most memory to take", 0},
    {"threads", THREADS, "N", 0, "Threads (default: as many as processors)", 0},
    {"tmp", TEMPORARY, "DIRECTORY", 0, "Where scratch files go (default: into the store)", 0},
    {"shape", SHAPE, "pairs|lists|ids", 0, "Shape of the dumps' lines (default: recognised from the first 1,000)", 0},
    {"names", NAMES, "FILE", 0, "For dumps of ids: lines of ID TAB URL or host name", 0},
    {"nofollow", NOFOLLOW, "skip|keep", 0, "What to do with nofollow links (default: skip)", 0},
    {"aliases", ALIASES, "FILE", 0, "Lines of FROM TAB TO: links to FROM count for TO", 0},
    {"add", ADD, "STORE", 0, "Grow this earlier store: its pages stay, but for those that the dumps fetched again", 0},
    {"drop", DROP, "FILE", 0, "URLs and hosts to leave out, one a line", 0},
    {"suggest-aliases", SUGGEST, "FILE", 0, "Write pages that differ only by scheme, www or a slash, as candidates for --aliases", 0},
    {"bad-max", BAD_MAX, "SHARE", 0, "Largest share of malformed URLs that is borne (default: 0.1)", 0},
    {"quiet", QUIET, NULL, 0, "No progress, no summary", 0},
    {0},
};

static error_t parse_option(int key, char *argument, struct argp_state *state)
{
    struct windrow_shard_options *shard = state->input;
    switch (key) {
    case OUT: shard->out = argument; return 0;
    case MEMORY: shard->memory_bytes = size_value(argument, "memory", state); return 0;
    case THREADS: shard->threads = (unsigned)count_value(argument, "threads", 1024, state); return 0;
    case TEMPORARY: shard->temporary = argument; return 0;
    case ALIASES: shard->aliases = argument; return 0;
    case NAMES: shard->names = argument; return 0;
    case ADD: shard->add = argument; return 0;
    case DROP: shard->drop = argument; return 0;
    case SUGGEST: suggest_path = argument; return 0;
    case QUIET: command_quiet = true; return 0;
    case SHAPE:
        if (!strcmp(argument, "pairs"))
            shard->shape = WINDROW_SHAPE_PAIRS;
        else if (!strcmp(argument, "lists"))
            shard->shape = WINDROW_SHAPE_LISTS;
        else if (!strcmp(argument, "ids"))
            shard->shape = WINDROW_SHAPE_IDS;
        else
            usage_error(state, "--shape=%s: pairs, lists or ids", argument);
        return 0;
    case NOFOLLOW:
        shard->keep_nofollow = !strcmp(argument, "keep");
        if (!shard->keep_nofollow && strcmp(argument, "skip"))
            usage_error(state, "--nofollow=%s: skip or keep", argument);
        return 0;
    case BAD_MAX:
        shard->bad_max = number_value(argument, "bad-max", state);
        if (shard->bad_max > 1)
            usage_error(state, "--bad-max=%s: a share from 0 to 1", argument);
        return 0;
    case ARGP_KEY_ARGS:
        shard->dumps = (const char *const *)&state->argv[state->next];
        shard->dump_count = (size_t)(state->argc - state->next);
        return 0;
    case ARGP_KEY_END:
        if (!shard->dump_count && !shard->add)
            usage_error(state, "a dump is missing (- is standard input)");
        if (!shard->out)
            usage_error(state, "--out STORE is missing");
        return 0;
    default: return ARGP_ERR_UNKNOWN;
    }
}

static void summarise(const char *store, bool already_done)
{
    struct windrow_standing standing;
    if (windrow_standing_read(store, NULL, &standing) || !standing.sharded)
        return;
    if (already_done)
        talk("shard", "%s is already sharded from dumps of these names; nothing was read", store);
    talk("shard", "%s: %s pages (%s crawled) on %s hosts, %s links", store, grouped(standing.pages), grouped(standing.crawled_pages),
         grouped(standing.hosts), grouped(standing.links));
    char line[256];
    size_t used = 0;
    for (int i = 0; i < WINDROW_DROP_COUNT; i++)
        if (standing.dropped[i] && used < sizeof line)
            used += (size_t)snprintf(line + used, sizeof line - used, "%s%s %s", used ? ", " : "", grouped(standing.dropped[i]), windrow_drop_names[i]);
    talk("shard", "links dropped: %s", used ? line : "none");
    if (standing.aliases || standing.alias_bad_lines)
        talk("shard", "aliases: %s folded, %s cycles cut, %s lines of no use", grouped(standing.aliases), grouped(standing.alias_cycles),
             grouped(standing.alias_bad_lines));
}

static uint64_t mebibytes(double bytes)
{
    return (uint64_t)(bytes / (1 << 20) + 0.999);
}

/* Counts the pages that may be one, and names them in a file on request. */
static enum windrow_status suggest(const struct windrow_shard_options *shard)
{
    struct windrow_variant_counts counts;
    enum windrow_status status = windrow_suggest_aliases(shard->out, shard->memory_bytes, suggest_path, &counts, &shard->watch);
    progress_end();
    if (!status)
        talk("shard", "%s%s pages differ from another only by scheme (%s), www (%s), a slash (%s) or several of these (%s)%s%s", counts.one_in > 1 ? "about " : "", grouped(counts.pages),
             grouped(counts.by_scheme), grouped(counts.by_www), grouped(counts.by_slash), grouped(counts.by_several),
             suggest_path ? ": see " : "; --suggest-aliases FILE names them", suggest_path ? suggest_path : "");
    return status;
}

enum windrow_status shard_command(int argc, char **argv)
{
    static const struct argp parser = {
        .options = options, .parser = parse_option, .args_doc = "--out STORE DUMP...",
        .doc = "Makes a store from raw link dumps, or goes on where an interrupted job was.\v"
               "A dump is text, compressed in any common way: lines of source TAB target [TAB rel], or of source TAB target TAB target "
               "and so on. - is standard input. Sizes take K, M, G, T (powers of 1024)."};
    struct windrow_shard_options shard;
    windrow_shard_defaults(&shard);
    argp_parse(&parser, argc, argv, 0, NULL, &shard);
    bool already_done = false;
    progress_begin("shard", &shard.watch);
    struct windrow_plan plan;
    enum windrow_status status = windrow_shard_check_disk(&shard, &plan);
    if (!status && plan.share > 0)
        talk("shard", "about %s links; %s MiB of disk at the worst moment, %s MiB in the end, up to %s MiB of memory", grouped((uint64_t)plan.links.point),
             grouped(mebibytes(plan.disk_bytes.point)), grouped(mebibytes(plan.store_bytes.point)), grouped(mebibytes((double)shard.memory_bytes)));
    if (!status)
        status = windrow_shard(&shard, &already_done);
    progress_end();
    if (!status) {
        summarise(shard.out, already_done);
        if (!already_done || suggest_path)
            status = suggest(&shard);
    }
    return finish("shard", status);
}
