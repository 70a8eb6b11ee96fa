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

enum windrow_shape { WINDROW_SHAPE_AUTO, WINDROW_SHAPE_PAIRS, WINDROW_SHAPE_LISTS };

struct windrow_shard_options {
    const char *out;             /* the store's directory; made when missing */
    const char *const *dumps;    /* paths, or "-" for standard input */
    size_t dump_count;
    enum windrow_shape shape;
    uint64_t memory_bytes;       /* promise about peak resident memory */
    unsigned threads;
    const char *temporary;       /* directory for scratch; NULL: inside the store */
    const char *aliases;         /* file of FROM TAB TO lines; NULL: none */
    bool keep_nofollow;
    double bad_max;              /* largest share of malformed URL fields, 0 to 1 */
    struct windrow_watch watch;
};

/* Why a link was dropped, in the order in which the reasons are tried. */
enum windrow_drop { WINDROW_DROP_MALFORMED, WINDROW_DROP_SCHEME, WINDROW_DROP_NOFOLLOW, WINDROW_DROP_SELF,
                    WINDROW_DROP_DUPLICATE, WINDROW_DROP_COUNT };
extern const char *const windrow_drop_names[WINDROW_DROP_COUNT];

void windrow_shard_defaults(struct windrow_shard_options *options);

/* Makes (or goes on making) a store from dumps. A finished store of the same dumps and settings is left
 * as it is and *already_done (may be NULL) set. Errors: WINDROW_USAGE for settings that contradict a job
 * begun before, WINDROW_INPUT for unusable dumps (the unfinished store is removed when the share of bad
 * fields is too high), WINDROW_RESOURCE, WINDROW_DAMAGED, WINDROW_STOPPED. */
enum windrow_status windrow_shard(const struct windrow_shard_options *options, bool *already_done);

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
    uint64_t memory_bytes;
    unsigned threads;
    double checkpoint_seconds;
    bool fresh;                    /* forget an earlier run of this name */
    struct windrow_watch watch;
};

void windrow_rank_defaults(struct windrow_rank_options *options);

/* Starts, resumes or refines a run. *already_done (may be NULL) is set when nothing was left to do.
 * Errors: WINDROW_USAGE (no such store, or another beta or method under this name without `fresh`),
 * WINDROW_RESOURCE (the vectors do not fit memory_bytes, or asked for more digits than double precision
 * can prove: the message says how many it can), WINDROW_DAMAGED, WINDROW_STOPPED. */
enum windrow_status windrow_rank(const struct windrow_rank_options *options, bool *already_done);

#endif
