/* crew: a fixed number of threads that work through numbered tasks.
 *
 * windrow_crew_run() hands out tasks 0…count−1 in order, each to whichever thread is free, and comes
 * back when all are done. The calling thread works too, so a crew of one starts no thread. What a task
 * computes must not depend on which worker runs it: that is how results stay the same for any number
 * of threads. After a failure no further task starts; the failure with the lowest task number among
 * those that ran is returned, with its message in the caller's thread.
 *
 * Threads: a crew serves one windrow_crew_run() at a time; tasks must not call it themselves.
 */
#ifndef WINDROW_BASE_CREW_H
#define WINDROW_BASE_CREW_H

#include "base/error.h"

#include <stdint.h>

struct windrow_crew;

/* Work on one task. `worker` is 0…workers−1: an index for scratch memory that no two running tasks share. */
typedef enum windrow_status (*windrow_crew_task)(void *context, uint64_t task, unsigned worker);

/* A crew of `workers` threads, the caller included (at least 1). WINDROW_RESOURCE when threads are out. */
enum windrow_status windrow_crew_create(unsigned workers, struct windrow_crew **crew);
void windrow_crew_destroy(struct windrow_crew *crew); /* NULL is fine */
unsigned windrow_crew_workers(const struct windrow_crew *crew);
enum windrow_status windrow_crew_run(struct windrow_crew *crew, uint64_t task_count, windrow_crew_task task, void *context);

/* The number of processors this process may use: the default crew. */
unsigned windrow_crew_default_workers(void);

#endif
