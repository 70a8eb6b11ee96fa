/* meter: how far a long job is, told to whoever asked.
 *
 * The job counts units as it goes (windrow_meter_add(), from any thread, cheap); the meter calls the
 * listener back at most every `interval` seconds, from whichever thread happens to count. The same
 * room carries the request to stop, which a signal handler may raise.
 */
#ifndef WINDROW_BASE_METER_H
#define WINDROW_BASE_METER_H

#include <pthread.h>
#include <stdatomic.h>
#include <stdbool.h>
#include <stdint.h>

struct windrow_progress {
    const char *stage;       /* what is being done: "reading dumps", "sweep", … */
    const char *unit;        /* what done and total count: "links", "bytes", "segments" */
    uint64_t done;
    uint64_t total;          /* 0 when nobody can know */
    double elapsed_seconds;  /* since the stage began */
    double rate;             /* units a second since the stage began */
    double seconds_left;     /* of the whole job where it can be told, else of the stage; negative when unknown */
    double share;            /* 0…1 of the stage, negative when unknown */
    double error_l1;         /* rank: the error so far, negative when there is none yet */
    uint64_t sweep;          /* rank: the sweep going on, from 1 */
    bool stage_ended;        /* the last call of a stage */
};

typedef void (*windrow_listener)(void *context, const struct windrow_progress *progress);

struct windrow_meter {
    windrow_listener listener; /* NULL: nobody listens */
    void *context;
    double interval_seconds;
    atomic_bool *stop;         /* raised to ask the job to stop at its next checkpoint; NULL: never */

    struct windrow_progress now; /* sweep, error_l1 and seconds_left may be set by the job between counts */
    atomic_uint_fast64_t done;
    double stage_began;
    _Atomic double next_call;
    pthread_mutex_t lock;
};

void windrow_meter_start(struct windrow_meter *meter, windrow_listener listener, void *context, double interval_seconds, atomic_bool *stop);
void windrow_meter_finish(struct windrow_meter *meter);
/* Begins a stage of `total` units (0: unknown); strings must outlive the stage. */
void windrow_meter_stage(struct windrow_meter *meter, const char *stage, const char *unit, uint64_t total);
/* Counts units; may call the listener. */
void windrow_meter_add(struct windrow_meter *meter, uint64_t units);
void windrow_meter_stage_end(struct windrow_meter *meter);
/* True once somebody asked the job to stop. */
bool windrow_meter_stopping(const struct windrow_meter *meter);

/* Seconds of a clock that never goes back. */
double windrow_seconds(void);

#endif
