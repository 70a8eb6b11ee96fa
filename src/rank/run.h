/* run: one ranking of a store as its directory holds it, for everyone who asks for its results.
 *
 * STORE/runs/NAME/ holds the ledger of the run and what the ledger names (layouts: FORMAT.md):
 *   scores-G.f64       scores by page id, of the generation G that is certified
 *   order-G            pages by falling score (order.h)
 *   state-0, state-1   checkpoints, the newest and the one before
 *   tiles-*            the links cut by stripes, while a run goes on whose vectors are larger than memory (sweep/tiles.h)
 * and STORE/runs/NAME.lock is held by whoever works on it.
 *
 * A run can be opened while another process works on it: what is open stays what was certified then.
 * Threads: an open run may be read from any thread.
 */
#ifndef WINDROW_RANK_RUN_H
#define WINDROW_RANK_RUN_H

#include "rank/certificate.h"
#include "rank/order.h"
#include "store/store.h"

#define WINDROW_RUN_NAME_MAX 64

/* What is known of a run without looking at its scores. */
struct windrow_run_facts {
    enum windrow_method method;
    double beta;
    double wanted_digits, wanted_error; /* last asked for; 0: not asked for */
    uint64_t store_fingerprint;
    bool working;                /* some process works on it now */
    bool finished;               /* what was wanted is proven */
    bool certified;              /* scores are there to be asked for */
    uint64_t sweeps;             /* passes over the core, certifying ones included */
    uint64_t link_visits;
    double expected_error;       /* estimated error_l1 so far; negative: none yet */
    double elapsed_seconds;      /* of all sessions together */
    double seconds_left;         /* negative: unknown */
    uint64_t peak_memory_bytes;  /* of the session that took most */
    uint64_t generation;         /* of the certified vector */
    struct windrow_certificate certificate;
};

/* A sweep in the history of a run. */
struct windrow_run_sweep {
    uint64_t sweep;              /* from 1 */
    double change;               /* sum of |change| over all scores of the core */
    double expected_error;       /* estimated error_l1 after it */
    uint64_t link_visits;        /* so far */
    double elapsed_seconds;      /* so far */
};

struct windrow_run;

/* WINDROW_USAGE: not a name for a run. NULL is fine for `name`: "main". */
enum windrow_status windrow_run_name_check(const char *name);

/* Opens a run of an open store. WINDROW_NO: there is none of that name; WINDROW_USAGE: it belongs to another
 * state of the store; WINDROW_DAMAGED. It may be without scores: see the facts. */
enum windrow_status windrow_run_open(const struct windrow_store *store, const char *name, struct windrow_run **run);
void windrow_run_close(struct windrow_run *run); /* NULL is fine */
const struct windrow_run_facts *windrow_run_facts(const struct windrow_run *run);

/* Calls `each` for every sweep of the history, in order, until it returns non-zero. */
enum windrow_status windrow_run_history(const struct windrow_run *run,
                                        enum windrow_status (*each)(void *context, const struct windrow_run_sweep *sweep), void *context);

/* Scores by page id and the order, NULL while nothing is certified. Valid until the run is closed. */
const double *windrow_run_scores(const struct windrow_run *run);
const struct windrow_order *windrow_run_order(const struct windrow_run *run);

/* A certified interval, in the shape that answers want: `run` is a struct windrow_run. */
void windrow_run_interval(const void *run, double score, double *low, double *high);

/* Reads a run back: checksums of all files that the ledger names, scores in range and adding up to 1, the order.
 * Calls `found` with a line for each damage; WINDROW_NO when there was any. */
enum windrow_status windrow_run_verify(const struct windrow_store *store, const char *name,
                                       void (*found)(void *context, const char *damage), void *context);

/* Calls `each` with the name of every run of a store, sorted, until it returns non-zero. */
enum windrow_status windrow_run_each(const struct windrow_store *store, enum windrow_status (*each)(void *context, const char *name), void *context);

#endif
