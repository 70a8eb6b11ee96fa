/* windrow plan: what a full job on some dumps will take. */
#include "command.h"
#include "progress.h"

#include <jansson.h>
#include <math.h>
#include <string.h>

enum { MEMORY = OPTION_FIRST, THREADS, TEMPORARY, SHAPE, NOFOLLOW, SAMPLE, FULL, JSON, QUIET };

static const struct argp_option options[] = {
    {"memory", MEMORY, "SIZE", 0, "Memory that the job will be given", 0},
    {"threads", THREADS, "N", 0, "Threads that it will be given (default: as many as processors)", 0},
    {"tmp", TEMPORARY, "DIRECTORY", 0, "Where a sample is sharded for trial (default: $TMPDIR or /tmp)", 0},
    {"shape", SHAPE, "pairs|lists", 0, "Shape of the dumps' lines (default: recognised from the first 1,000)", 0},
    {"nofollow", NOFOLLOW, "skip|keep", 0, "What to do with nofollow links (default: skip)", 0},
    {"sample", SAMPLE, "BYTES", 0, "Text to read, and to shard for trial (default: 256M)", 0},
    {"full", FULL, NULL, 0, "Read everything: counts become exact", 0},
    {"json", JSON, NULL, 0, "One JSON object", 0},
    {"quiet", QUIET, NULL, 0, "No progress, no talk on standard error but errors", 0},
    {0},
};

struct request {
    struct windrow_plan_options plan;
    bool json;
};

static error_t parse_option(int key, char *argument, struct argp_state *state)
{
    struct request *request = state->input;
    struct windrow_plan_options *plan = &request->plan;
    switch (key) {
    case MEMORY: plan->memory_bytes = size_value(argument, "memory", state); return 0;
    case THREADS: plan->threads = (unsigned)count_value(argument, "threads", 1024, state); return 0;
    case TEMPORARY: plan->temporary = argument; return 0;
    case SAMPLE: plan->sample_bytes = size_value(argument, "sample", state); return 0;
    case FULL: plan->full = true; return 0;
    case JSON: request->json = true; return 0;
    case QUIET: command_quiet = true; return 0;
    case SHAPE:
        if (!strcmp(argument, "pairs"))
            plan->shape = WINDROW_SHAPE_PAIRS;
        else if (!strcmp(argument, "lists"))
            plan->shape = WINDROW_SHAPE_LISTS;
        else
            usage_error(state, "--shape=%s: pairs or lists", argument);
        return 0;
    case NOFOLLOW:
        plan->keep_nofollow = !strcmp(argument, "keep");
        if (!plan->keep_nofollow && strcmp(argument, "skip"))
            usage_error(state, "--nofollow=%s: skip or keep", argument);
        return 0;
    case ARGP_KEY_ARGS:
        plan->dumps = (const char *const *)&state->argv[state->next];
        plan->dump_count = (size_t)(state->argc - state->next);
        return 0;
    case ARGP_KEY_NO_ARGS:
        usage_error(state, "a dump is missing (- is standard input)");
        return 0;
    default: return ARGP_ERR_UNKNOWN;
    }
}

/* ---- For people ---- */

/* Three digits are more than an estimate has. */
static double rounded(double number)
{
    if (number < 1000)
        return round(number);
    double unit = pow(10, floor(log10(number)) - 2);
    return round(number / unit) * unit;
}

static void print_count(const char *name, struct windrow_interval interval)
{
    printf("%-16s%s", name, grouped((uint64_t)rounded(interval.point)));
    if (interval.high > interval.low)
        printf("   (%s to %s)", grouped((uint64_t)rounded(interval.low)), grouped((uint64_t)rounded(interval.high)));
    printf("\n");
}

static void put_size(double bytes)
{
    static const char units[] = " KMGTP";
    int unit = 0;
    while (bytes >= 1000 && unit < 5) {
        bytes /= 1024;
        unit++;
    }
    printf(bytes < 10 && unit ? "%.1f" : "%.0f", bytes);
    if (unit)
        printf(" %ciB", units[unit]);
    else
        printf(" bytes");
}

static void put_time(double seconds)
{
    if (seconds < 10)
        printf("%.2g s", seconds);
    else if (seconds < 120)
        printf("%.0f s", seconds);
    else if (seconds < 7200)
        printf("%.0f min", seconds / 60);
    else
        printf("%.1f h", seconds / 3600);
}

static void put_share(double share)
{
    printf("%.1f %%", 100 * share);
}

static void print_interval(const char *name, struct windrow_interval interval, void (*put)(double), const char *behind)
{
    printf("%-16s", name);
    put(interval.point);
    printf("   (");
    put(interval.low);
    printf(" to ");
    put(interval.high);
    printf(")%s\n", behind);
}

static void print_plain(const struct request *request, const struct windrow_plan *plan)
{
    print_interval("disk to shard", plan->disk_bytes, put_size, ", scratch and store together at the worst moment");
    print_interval("scratch", plan->scratch_bytes, put_size, "");
    print_interval("store", plan->store_bytes, put_size, "");
    print_interval("a run", plan->run_bytes, put_size, " more");
    switch (plan->basis) {
    case WINDROW_PLAN_WHOLE: printf("basis           all of the dumps was read\n"); break;
    case WINDROW_PLAN_PLACES: printf("basis           %.3g %% of the dumps, in places spread over them; --full reads all\n", 100 * plan->share); break;
    case WINDROW_PLAN_PREFIX:
        printf("basis           the beginnings of the dumps, %.3g %% of them, which need not be like the rest; --full reads all\n", 100 * plan->share);
    }
    print_count("lines", plan->lines);
    print_count("URL fields", plan->fields);
    print_count("pages", plan->pages);
    print_count("crawled", plan->crawled_pages);
    print_count("with links", plan->core_pages);
    print_interval("dangling", plan->dangling_share, put_share, " of the pages");
    print_interval("frontier", plan->frontier_share, put_share, " of the pages");
    print_count("hosts", plan->hosts);
    print_count("links", plan->links);
    print_count("core links", plan->core_links);
    printf("bits a link     %.2f   (%.2f to %.2f)\n", plan->link_bits.point, plan->link_bits.low, plan->link_bits.high);
    print_count("maybe doubles", plan->variants);
    printf("                by scheme %s, www %s, trailing slash %s, several %s\n", grouped((uint64_t)rounded((double)plan->variant_kinds.by_scheme)),
           grouped((uint64_t)rounded((double)plan->variant_kinds.by_www)), grouped((uint64_t)rounded((double)plan->variant_kinds.by_slash)),
           grouped((uint64_t)rounded((double)plan->variant_kinds.by_several)));
    printf("memory          vectors need ");
    put_size(plan->vector_bytes.point);
    printf("   (");
    put_size(plan->vector_bytes.low);
    printf(" to ");
    put_size(plan->vector_bytes.high);
    printf("); fit in --memory ");
    put_size((double)request->plan.memory_bytes);
    if (plan->vectors_fit)
        printf(": yes, 1 tile\n");
    else if (plan->stripes)
        printf(": no, %u x %u tiles\n", plan->stripes, plan->stripes);
    else
        printf(": no, and it is too little for tiles\n");
    print_interval("time to shard", plan->shard_seconds, put_time, "");
    print_interval("a sweep", plan->sweep_seconds, put_time, "");
    print_interval("time to rank", plan->rank_seconds, put_time, ", to an error_l1 of 1e-9");
    struct windrow_interval total = {plan->shard_seconds.low + plan->rank_seconds.low, plan->shard_seconds.point + plan->rank_seconds.point,
                                     plan->shard_seconds.high + plan->rank_seconds.high};
    print_interval("time in all", total, put_time, "");
}

/* ---- For programs ---- */

static json_t *json_interval(struct windrow_interval interval, bool whole)
{
    if (whole)
        return json_pack("{s:I,s:I,s:I}", "low", (json_int_t)llround(interval.low), "point", (json_int_t)llround(interval.point), "high",
                         (json_int_t)llround(interval.high));
    return json_pack("{s:f,s:f,s:f}", "low", interval.low, "point", interval.point, "high", interval.high);
}

static enum windrow_status print_json(const struct windrow_plan *plan)
{
    static const char *const bases[] = {"whole", "places", "prefix"};
    const struct {
        const char *key;
        struct windrow_interval interval;
        bool whole;
    } members[] = {
        {"disk_bytes", plan->disk_bytes, true}, {"scratch_bytes", plan->scratch_bytes, true}, {"store_bytes", plan->store_bytes, true},
        {"run_bytes", plan->run_bytes, true}, {"lines", plan->lines, true}, {"fields", plan->fields, true}, {"pages", plan->pages, true},
        {"crawled_pages", plan->crawled_pages, true}, {"core_pages", plan->core_pages, true}, {"hosts", plan->hosts, true},
        {"links", plan->links, true}, {"core_links", plan->core_links, true}, {"dangling_share", plan->dangling_share, false},
        {"frontier_share", plan->frontier_share, false}, {"variants", plan->variants, true}, {"link_bits", plan->link_bits, false},
        {"vector_bytes", plan->vector_bytes, true}, {"shard_seconds", plan->shard_seconds, false}, {"sweep_seconds", plan->sweep_seconds, false},
        {"rank_seconds", plan->rank_seconds, false},
    };
    json_t *object = json_pack("{s:s,s:f,s:b,s:i,s:{s:I,s:I,s:I,s:I}}", "basis", bases[plan->basis], "share", plan->share, "vectors_fit", plan->vectors_fit, "stripes", (int)plan->stripes,
                               "variant_kinds", "scheme", (json_int_t)plan->variant_kinds.by_scheme, "www", (json_int_t)plan->variant_kinds.by_www,
                               "slash", (json_int_t)plan->variant_kinds.by_slash, "several", (json_int_t)plan->variant_kinds.by_several);
    int failed = !object;
    for (size_t i = 0; i < sizeof members / sizeof members[0] && !failed; i++)
        failed = json_object_set_new(object, members[i].key, json_interval(members[i].interval, members[i].whole));
    failed = failed || json_dumpf(object, stdout, JSON_INDENT(2) | JSON_REAL_PRECISION(6)) || putchar('\n') == EOF;
    json_decref(object);
    if (failed) {
        complain("plan", "cannot write the plan: out of memory or of room for standard output");
        return WINDROW_RESOURCE;
    }
    return WINDROW_OK;
}

enum windrow_status plan_command(int argc, char **argv)
{
    static const struct argp parser = {
        .options = options, .parser = parse_option, .args_doc = "DUMP...",
        .doc = "Tells what a full job will take: pages, links, disk, memory, time; each with the range that it is thought to lie in.\v"
               "A sample of plain files is read in places spread over them; of compressed ones it is their beginning, which says less; a pipe can "
               "only be read with --full. The sample is sharded for trial, to see what links and pages take on disk, and how fast this machine is."};
    struct request request = {0};
    struct windrow_plan plan;
    windrow_plan_defaults(&request.plan);
    argp_parse(&parser, argc, argv, 0, NULL, &request);
    progress_begin("plan", &request.plan.watch);
    enum windrow_status status = windrow_plan(&request.plan, &plan);
    progress_end();
    if (status)
        return finish("plan", status);
    if (request.json)
        status = print_json(&plan);
    else
        print_plain(&request, &plan);
    if (fflush(stdout) && !status) {
        complain("plan", "cannot write to standard output");
        status = WINDROW_RESOURCE;
    }
    return status;
}
