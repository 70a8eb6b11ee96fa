/* windrow: link-based scores for every page of a crawl that is larger than memory.
 *
 * This is the one public header of libwindrow. The order of work is
 *   windrow_shard()   raw link dumps -> a store
 *   windrow_rank()    a store -> a run: scores with a proven error
 *   answers           top pages, scores and places of single pages, status, verification
 *
 * What a user must know first:
 *  - A score measures links, not truth or quality.
 *  - Every function that can fail returns an enum windrow_status, whose values are also the exit codes
 *    of the program; windrow_message() then says what failed, where, and what can be done.
 *  - Nothing is overwritten in place: a job may be killed at any instruction and is gone on with by
 *    calling the same function again with the same arguments.
 *  - Two processes may read one store at the same time; only one may shard into it, and only one may
 *    work on a run of a given name.
 *  - Option structures are filled by their windrow_..._defaults() function first, then changed.
 */
#ifndef WINDROW_H
#define WINDROW_H

#include <stdatomic.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#define WINDROW_VERSION "0.1.0"

/* Every outcome of the library; the values are the program's exit codes. */
enum windrow_status {
    WINDROW_OK = 0,       /* done */
    WINDROW_NO = 1,       /* the answer to the question is no: damage found, URL unknown, not ranked yet */
    WINDROW_USAGE = 2,    /* the call or the command line makes no sense */
    WINDROW_INPUT = 3,    /* the input cannot be used */
    WINDROW_DAMAGED = 4,  /* a store or a ledger is damaged */
    WINDROW_RESOURCE = 5, /* out of disk, memory budget, or another resource */
    WINDROW_STOPPED = 6,  /* stopped at a checkpoint by request; run again to go on */
    WINDROW_BUG = 70      /* our own bug */
};

/* What failed in this thread's last failing call; "" when nothing did. Valid until the next failure. */
const char *windrow_message(void);

/* ---- Watching a long job ------------------------------------------------------------------- */

/* How far a job is. */
struct windrow_progress {
    const char *stage;       /* what is being done: "reading dumps", "sweeping", ... */
    const char *unit;        /* what done and total count: "links", "bytes", "segments" */
    uint64_t done;
    uint64_t total;          /* 0 when nobody can know */
    double elapsed_seconds;  /* since the stage began */
    double rate;             /* units a second since the stage began */
    double seconds_left;     /* of the whole job where it can be told, else of the stage; negative: unknown */
    double share;            /* 0 to 1 of the stage; negative: unknown */
    double error_l1;         /* ranking: the estimated error so far; negative when there is none yet */
    uint64_t sweep;          /* ranking: the sweep going on, from 1; 0 outside ranking */
    bool stage_ended;        /* the last call of a stage */
};

/* Called from any thread of the job, never from two at once. */
typedef void (*windrow_listener)(void *context, const struct windrow_progress *progress);

/* Whoever watches a job. All zero: nobody does. */
struct windrow_watch {
    windrow_listener listener;
    void *context;
    double interval_seconds;   /* least time between two calls within a stage */
    const atomic_bool *stop;   /* raise it to stop the job at its next checkpoint (WINDROW_STOPPED); may be NULL */
};

/* ---- Sharding ------------------------------------------------------------------------------ */

enum windrow_shape { WINDROW_SHAPE_AUTO, WINDROW_SHAPE_PAIRS, WINDROW_SHAPE_LISTS, WINDROW_SHAPE_IDS };

struct windrow_shard_options {
    const char *out;             /* the store's directory; made when missing */
    const char *const *dumps;    /* files, directories (all their files), "@FILE" (a list of paths), or "-" for standard input */
    size_t dump_count;
    enum windrow_shape shape;
    uint64_t memory_bytes;       /* promise about peak resident memory */
    unsigned threads;
    const char *temporary;       /* directory for scratch; NULL: inside the store */
    const char *aliases;         /* file of FROM TAB TO lines; NULL: none */
    const char *names;           /* file of ID TAB URL-or-host lines, for dumps of ids; NULL: none */
    const char *drop;            /* file of URLs and hosts that are to be left out; NULL: none */
    const char *add;             /* earlier store to grow from: its pages stay unless the dumps fetched them again; NULL: none */
    bool keep_nofollow;
    double bad_max;              /* largest share of malformed URL fields, 0 to 1 */
    struct windrow_watch watch;
};

/* Why a link was dropped, in the order in which the reasons are tried. */
enum windrow_drop { WINDROW_DROP_MALFORMED, WINDROW_DROP_SCHEME, WINDROW_DROP_NOFOLLOW, WINDROW_DROP_SELF,
                    WINDROW_DROP_DUPLICATE, WINDROW_DROP_TAKEDOWN, WINDROW_DROP_COUNT };
extern const char *const windrow_drop_names[WINDROW_DROP_COUNT];

void windrow_shard_defaults(struct windrow_shard_options *options);

/* Makes (or goes on making) a store from dumps. A finished store of the same dumps and settings is left
 * as it is and *already_done (may be NULL) set. Errors: WINDROW_USAGE for settings that contradict a job
 * begun before, WINDROW_INPUT for unusable dumps (the unfinished store is removed when the share of bad
 * fields is too high), WINDROW_RESOURCE, WINDROW_DAMAGED, WINDROW_STOPPED. */
enum windrow_status windrow_shard(const struct windrow_shard_options *options, bool *already_done);

/* ---- URLs that may be one page --------------------------------------------------------------- */

/* Pages whose URL differs from another page's only by scheme, by a leading "www.", or by a slash at the end of
 * the path. Each counts once, for how it differs from the one of its group that would stand for all. */
struct windrow_variant_counts {
    uint64_t pages;       /* the sum of the following */
    uint64_t by_scheme;
    uint64_t by_www;
    uint64_t by_slash;
    uint64_t by_several;  /* of these at once */
    uint64_t one_in;      /* 1: counted; more: a large crawl, estimated from so few of its URLs */
};

/* Looks for such pages in a finished store, and writes lines FROM TAB TO, in host order of FROM, which may be
 * looked through and given to --aliases. TO is the URL with https, without "www.", with the slash, in this
 * order of importance. `out_path`: a file to replace; NULL: only count, in one pass over the page table, and large
 * crawls by a sample (drawn by a hash, so that variants are in it together). `watch` may be NULL. Errors:
 * WINDROW_USAGE (no store), WINDROW_NO (not finished yet), WINDROW_DAMAGED,
 * WINDROW_RESOURCE, WINDROW_STOPPED. */
enum windrow_status windrow_suggest_aliases(const char *store, uint64_t memory_bytes, const char *out_path,
                                            struct windrow_variant_counts *counts, const struct windrow_watch *watch);

/* ---- Planning ------------------------------------------------------------------------------ */

/* A figure and the range it is thought to lie in. */
struct windrow_interval {
    double low, point, high;
};

struct windrow_plan_options {
    const char *const *dumps;    /* as for sharding; standard input only with `full` */
    size_t dump_count;
    enum windrow_shape shape;
    uint64_t memory_bytes;       /* of the job that is planned; planning itself takes at most half of it */
    unsigned threads;
    const char *temporary;       /* directory for the sample and its store; NULL: $TMPDIR or /tmp */
    uint64_t sample_bytes;       /* of decompressed dump; most that is read without `full`, and that is sharded for trial */
    bool full;                   /* read everything */
    bool keep_nofollow;
    struct windrow_watch watch;
};

/* Where a plan's counts come from, from the surest to the least sure. */
enum windrow_plan_basis { WINDROW_PLAN_WHOLE,  /* everything was read */
                          WINDROW_PLAN_PLACES, /* places spread evenly over all dumps */
                          WINDROW_PLAN_PREFIX  /* the beginnings of compressed dumps */ };

struct windrow_plan {
    enum windrow_plan_basis basis;
    double share;                         /* of the dumps that was read, 0 to 1 */
    struct windrow_interval lines, fields; /* URL fields */
    struct windrow_interval pages, crawled_pages, core_pages, hosts, links, core_links;
    struct windrow_interval dangling_share, frontier_share; /* of pages: without a kept out-link; never fetched */
    struct windrow_interval variants;     /* pages that differ from another only by scheme, www or slash */
    struct windrow_variant_counts variant_kinds; /* the points of its parts */
    struct windrow_interval link_bits;    /* bytes of blocks × 8 / links */
    struct windrow_interval store_bytes;
    struct windrow_interval scratch_bytes; /* the most that scratch files take at a time */
    struct windrow_interval disk_bytes;    /* scratch and store together at the worst moment of sharding */
    struct windrow_interval run_bytes;     /* what a run leaves beside the store */
    struct windrow_interval vector_bytes;  /* memory of the vectors while ranking */
    bool vectors_fit;                      /* all of them in memory_bytes, at the high end */
    unsigned stripes;                      /* 1 when they fit; else the links are cut into stripes x stripes tiles; 0: too little memory */
    struct windrow_interval shard_seconds, sweep_seconds, rank_seconds; /* ranking to error_l1 1e-9 */
};

void windrow_plan_defaults(struct windrow_plan_options *options);

/* Tells what a job on these dumps will take. Reads a sample of them, or everything with `full`, and shards
 * the sample for trial, since what a link and a page take on disk, and the speed, are this crawl's and this machine's
 * own. Errors: WINDROW_USAGE (standard input or a pipe without `full`, dumps of ids), WINDROW_INPUT,
 * WINDROW_RESOURCE, WINDROW_STOPPED. */
enum windrow_status windrow_plan(const struct windrow_plan_options *options, struct windrow_plan *plan);

/* Whether a job that is about to begin has room on disk. Plans it from a small sample into *plan (share 0: the dumps are
 * a pipe or of ids, or little enough, and nothing was planned). WINDROW_RESOURCE when even the low end of the plan does not
 * fit the file systems of `out` and `temporary`: the message says how many bytes are missing. A job that was begun is
 * not planned again. */
enum windrow_status windrow_shard_check_disk(const struct windrow_shard_options *options, struct windrow_plan *plan);

/* ---- Ranking ------------------------------------------------------------------------------- */

enum windrow_method { WINDROW_METHOD_MIXED, /* Gauss-Seidel, host balance, Anderson mixing */
                      WINDROW_METHOD_POWER  /* plain power iteration over all links: slow, the oracle */ };

struct windrow_rank_options {
    const char *store;
    const char *run;               /* name of the run; "main" */
    enum windrow_method method;
    double beta;                   /* damping, 0 < beta < 1 */
    double digits;                 /* proven digits of every score to reach; 0: not asked for */
    double error;                  /* proven error_l1 to reach; 0: not asked for */
    uint64_t memory_bytes;         /* promise about peak resident memory; where the vectors do not fit they are kept in a file, the links
                                    * are first cut into tiles beside the run, and 64 MiB may come on top. Fixed by the first
                                    * checkpoint: later sessions need as much as the first, not less */
    unsigned threads;
    double checkpoint_seconds;
    bool fresh;                    /* forget an earlier run of this name */
    struct windrow_watch watch;
};

void windrow_rank_defaults(struct windrow_rank_options *options);

/* Starts, resumes or refines a run. *already_done (may be NULL) is set when nothing was left to do.
 * Errors: WINDROW_USAGE (no such store, or another beta or method under this name without `fresh`),
 * WINDROW_RESOURCE (memory_bytes or the disk do not suffice, or asked for more digits than double precision
 * can prove: the message says how many it can), WINDROW_DAMAGED, WINDROW_STOPPED. */
enum windrow_status windrow_rank(const struct windrow_rank_options *options, bool *already_done);

/* ---- Answers ------------------------------------------------------------------------------- */

/* A run's scores and places, opened for questions. While the run goes on, it answers from the vector that
 * was certified last. One object, one thread; open it again in another. */
struct windrow_ranking;

/* `run`: NULL for "main". WINDROW_USAGE: there is no such store; WINDROW_NO: not ranked yet;
 * WINDROW_DAMAGED. */
enum windrow_status windrow_ranking_open(const char *store, const char *run, struct windrow_ranking **ranking);
void windrow_ranking_close(struct windrow_ranking *ranking); /* NULL is fine */

struct windrow_ranking_facts {
    uint64_t pages;
    double digits;    /* proven for every score */
    double error_l1;
    bool finished;    /* false: the run goes on, or was stopped, and its scores can still get better */
};
struct windrow_ranking_facts windrow_ranking_facts(const struct windrow_ranking *ranking);

enum windrow_per { WINDROW_PER_ALL, WINDROW_PER_HOST, WINDROW_PER_DOMAIN };

/* One page of an answer. Text is not terminated and valid until the call that gave the row, or the
 * taker that was given it, returns or asks again. URLs and names are ASCII in normal form. */
struct windrow_row {
    const char *group;        /* host or domain; NULL where the whole crawl is asked about */
    size_t group_bytes;
    uint64_t place;           /* from 1, in the group or the crawl; equal scores stand in host order */
    uint64_t range_first;     /* the places that the certificate leaves possible: one when proven */
    uint64_t range_last;
    double score;             /* sums to 1 over all pages */
    double mean_multiple;     /* score times the number of pages */
    const char *url;
    size_t url_bytes;
};

/* Takes a row; anything but WINDROW_OK ends the answer, which then returns it. */
typedef enum windrow_status (*windrow_taker)(void *context, const struct windrow_row *row);

/* The first `count` pages of the crawl, or of each host or domain in host order. Memory grows with
 * `count`, not with the crawl; per domain also with the hosts that share their last two labels. */
enum windrow_status windrow_ranking_top(struct windrow_ranking *ranking, enum windrow_per per, uint64_t count,
                                        windrow_taker taker, void *context);

/* One page's score and its place in the crawl. `url` may be spelled in any way that has its normal form.
 * *folded (may be NULL): an alias names another page for it, which the row is about.
 * WINDROW_NO: the URL is unknown. */
enum windrow_status windrow_ranking_score(struct windrow_ranking *ranking, const char *url, size_t url_bytes,
                                          struct windrow_row *row, bool *folded);

/* Every page with its place in the crawl, in host order. */
enum windrow_status windrow_ranking_all(struct windrow_ranking *ranking, windrow_taker taker, void *context);

/* How a store and its run stand: done, or how far the job on them is. */
enum windrow_state { WINDROW_STATE_SHARDING, WINDROW_STATE_SHARDED, WINDROW_STATE_RANKING, WINDROW_STATE_STOPPED,
                     WINDROW_STATE_FINISHED, WINDROW_STATES };
extern const char *const windrow_state_names[WINDROW_STATES];

struct windrow_standing {
    enum windrow_state state;
    const char *stage;          /* of a store that is not whole yet: what is, or was, being done; else NULL */
    double stage_share;         /* how much of that stage is done, 0 to 1; negative: unknown */
    bool sharded;               /* the store is whole: the next eleven lines are known */
    uint64_t pages;
    uint64_t crawled_pages;
    uint64_t dangling_pages;
    uint64_t links;
    uint64_t hosts;
    uint64_t core_pages;
    uint64_t core_links;
    uint64_t dropped[WINDROW_DROP_COUNT];
    uint64_t aliases;           /* URLs that stand for another, by --aliases; of its lines that were of no use; of cycles cut */
    uint64_t alias_bad_lines;
    uint64_t alias_cycles;
    bool begun;                 /* there is a run: the next two lines are known */
    uint64_t sweeps;            /* all passes over the core */
    uint64_t link_visits;       /* all passes counted */
    bool certified;             /* scores are proven: the next four lines are known */
    double error_l1;
    double alpha;               /* no score is off by more */
    double rho;                 /* nor by more than this share of itself */
    double digits;
    double elapsed_seconds;     /* of the job that is or was at work last; 0 while the store is not whole */
    double seconds_left;        /* 0 when it is done; negative: unknown */
    uint64_t peak_memory_bytes; /* 0: unknown */
    uint64_t store_bytes;       /* on disk, runs included */
    double link_bits;           /* block bytes times 8 over links */
};

/* `run`: NULL for "main", which need not be there. WINDROW_USAGE: there is no such store;
 * WINDROW_NO: there is no such run; WINDROW_DAMAGED. */
enum windrow_status windrow_standing_read(const char *store, const char *run, struct windrow_standing *standing);

/* What the parts of a store take, by file size. Times 8 over the links: bits a link. */
struct windrow_store_sizes {
    uint64_t page_bytes;        /* frames of the page table */
    uint64_t page_index_bytes;  /* the page table's index and first keys */
    uint64_t host_bytes;        /* host table and names */
    uint64_t core_map_bytes;
    uint64_t core_link_bytes;   /* blocks of core pages */
    uint64_t rim_link_bytes;    /* blocks of dangling pages */
    uint64_t degree_bytes;      /* out-degrees and inside degrees */
    uint64_t alias_bytes;       /* table of folded URLs, 0 when there is none */
    uint64_t manifest_bytes;    /* with its seal */
    uint64_t all_bytes;         /* the sum of the above */
};

/* Tells what the parts of a finished store take. WINDROW_USAGE (no store), WINDROW_NO (not finished), WINDROW_DAMAGED. */
enum windrow_status windrow_sizes_read(const char *store, struct windrow_store_sizes *sizes, uint64_t *links);

/* Reads a store and all its runs back against checksums, counts and invariants. Calls `found` (never two
 * calls at once) with a line for each damage; WINDROW_NO when there was any, or when the store is not
 * finished. `threads`: 0 for as many as there are processors. WINDROW_USAGE: no store. */
enum windrow_status windrow_verify(const char *store, unsigned threads, void (*found)(void *context, const char *damage),
                                   void *context, const struct windrow_watch *watch);

#endif
