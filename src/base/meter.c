#include "base/meter.h"

#include <stddef.h>
#include <time.h>

double windrow_seconds(void)
{
    struct timespec now;
    clock_gettime(CLOCK_MONOTONIC, &now);
    return (double)now.tv_sec + 1e-9 * (double)now.tv_nsec;
}

void windrow_meter_start(struct windrow_meter *meter, const struct windrow_watch *watch)
{
    meter->watch = *watch;
    meter->now = (struct windrow_progress){.error_l1 = -1, .seconds_left = -1};
    atomic_store(&meter->done, 0);
    atomic_store(&meter->next_call, 0);
    pthread_mutex_init(&meter->lock, NULL);
}

void windrow_meter_finish(struct windrow_meter *meter)
{
    pthread_mutex_destroy(&meter->lock);
}

void windrow_meter_stage(struct windrow_meter *meter, const char *stage, const char *unit, uint64_t total)
{
    meter->now.stage = stage;
    meter->now.unit = unit;
    meter->now.total = total;
    meter->now.seconds_left = -1;
    meter->stage_began = windrow_seconds();
    atomic_store(&meter->done, 0);
    atomic_store(&meter->next_call, meter->stage_began + meter->watch.interval_seconds);
}

static void call(struct windrow_meter *meter, double time, bool ended)
{
    struct windrow_progress progress = meter->now;
    progress.done = atomic_load(&meter->done);
    progress.elapsed_seconds = time - meter->stage_began;
    progress.rate = progress.elapsed_seconds > 0 ? (double)progress.done / progress.elapsed_seconds : 0;
    progress.share = progress.total ? (double)progress.done / (double)progress.total : -1;
    if (progress.seconds_left < 0 && progress.total && progress.rate > 0 && progress.done <= progress.total)
        progress.seconds_left = (double)(progress.total - progress.done) / progress.rate;
    progress.stage_ended = ended;
    meter->watch.listener(meter->watch.context, &progress);
}

void windrow_meter_left(struct windrow_meter *meter, double seconds)
{
    pthread_mutex_lock(&meter->lock);
    meter->now.seconds_left = seconds;
    pthread_mutex_unlock(&meter->lock);
}

void windrow_meter_add(struct windrow_meter *meter, uint64_t units)
{
    atomic_fetch_add(&meter->done, units);
    if (!meter->watch.listener)
        return;
    double time = windrow_seconds();
    if (time < atomic_load(&meter->next_call) || pthread_mutex_trylock(&meter->lock))
        return;
    atomic_store(&meter->next_call, time + meter->watch.interval_seconds);
    call(meter, time, false);
    pthread_mutex_unlock(&meter->lock);
}

void windrow_meter_stage_end(struct windrow_meter *meter)
{
    if (meter->watch.listener)
        call(meter, windrow_seconds(), true);
}

bool windrow_meter_stopping(const struct windrow_meter *meter)
{
    return meter->watch.stop && atomic_load(meter->watch.stop);
}
