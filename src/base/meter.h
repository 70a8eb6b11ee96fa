/* meter: how far a long job is, told to whoever asked.
 *
 * The job counts units as it goes (windrow_meter_add(), from any thread, cheap); the meter calls the
 * listener back at most every `interval` seconds, from whichever thread happens to count. The same
 * room carries the request to stop, which a signal handler may raise.
 */
#ifndef WINDROW_BASE_METER_H
#define WINDROW_BASE_METER_H

#include "windrow.h"

#include <pthread.h>

struct windrow_meter {
    struct windrow_watch watch;

    struct windrow_progress now; /* sweep, error_l1 and seconds_left may be set by the job between counts */
    atomic_uint_fast64_t done;
    double stage_began;
    _Atomic double next_call;
    pthread_mutex_t lock;
};

void windrow_meter_start(struct windrow_meter *meter, const struct windrow_watch *watch);
void windrow_meter_finish(struct windrow_meter *meter);
/* Begins a stage of `total` units (0: unknown); strings must outlive the stage. */
void windrow_meter_stage(struct windrow_meter *meter, const char *stage, const char *unit, uint64_t total);
/* Says how long the whole job will still take, from any thread; negative: unknown. */
void windrow_meter_left(struct windrow_meter *meter, double seconds);
/* Counts units; may call the listener. */
void windrow_meter_add(struct windrow_meter *meter, uint64_t units);
void windrow_meter_stage_end(struct windrow_meter *meter);
/* True once somebody asked the job to stop. */
bool windrow_meter_stopping(const struct windrow_meter *meter);

/* Seconds of a clock that never goes back. */
double windrow_seconds(void);

#endif
