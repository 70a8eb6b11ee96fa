#include "base/crew.h"

#include <pthread.h>
#include <sched.h>
#include <stdatomic.h>
#include <stdbool.h>
#include <stdlib.h>
#include <string.h>

struct windrow_crew {
    unsigned workers;
    pthread_t *threads;    /* workers − 1 of them */
    unsigned started;
    pthread_mutex_t lock;
    pthread_cond_t wake;   /* a new round, or the end */
    pthread_cond_t done;   /* the last worker of a round is through */
    uint64_t round;
    unsigned busy;
    bool ending;

    windrow_crew_task task;
    void *context;
    uint64_t task_count;
    atomic_uint_fast64_t next;
    atomic_bool failed;
    enum windrow_status status;
    uint64_t status_task;
    char message[WINDROW_MESSAGE_BYTES];
};

struct start {
    struct windrow_crew *crew;
    unsigned worker;
};

static void work(struct windrow_crew *crew, unsigned worker)
{
    while (!atomic_load(&crew->failed)) {
        uint64_t task = atomic_fetch_add(&crew->next, 1);
        if (task >= crew->task_count)
            return;
        enum windrow_status status = crew->task(crew->context, task, worker);
        if (!status)
            continue;
        pthread_mutex_lock(&crew->lock);
        if (!crew->status || task < crew->status_task) {
            crew->status = status;
            crew->status_task = task;
            memcpy(crew->message, windrow_message(), sizeof crew->message);
        }
        atomic_store(&crew->failed, true);
        pthread_mutex_unlock(&crew->lock);
    }
}

static void *thread_main(void *argument)
{
    struct start start = *(struct start *)argument;
    free(argument);
    struct windrow_crew *crew = start.crew;
    uint64_t seen = 0;
    pthread_mutex_lock(&crew->lock);
    for (;;) {
        while (crew->round == seen && !crew->ending)
            pthread_cond_wait(&crew->wake, &crew->lock);
        if (crew->ending)
            break;
        seen = crew->round;
        pthread_mutex_unlock(&crew->lock);
        work(crew, start.worker);
        pthread_mutex_lock(&crew->lock);
        if (--crew->busy == 0)
            pthread_cond_signal(&crew->done);
    }
    pthread_mutex_unlock(&crew->lock);
    return NULL;
}

enum windrow_status windrow_crew_create(unsigned workers, struct windrow_crew **out)
{
    *out = NULL;
    struct windrow_crew *crew = calloc(1, sizeof *crew);
    if (!crew)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while starting %u threads", workers);
    crew->workers = workers ? workers : 1;
    pthread_mutex_init(&crew->lock, NULL);
    pthread_cond_init(&crew->wake, NULL);
    pthread_cond_init(&crew->done, NULL);
    crew->threads = calloc(crew->workers, sizeof *crew->threads);
    for (unsigned worker = 1; crew->threads && worker < crew->workers; worker++) {
        struct start *start = malloc(sizeof *start);
        if (start)
            *start = (struct start){crew, worker};
        int failure = start ? pthread_create(&crew->threads[worker - 1], NULL, thread_main, start) : -1;
        if (failure) {
            free(start);
            windrow_crew_destroy(crew);
            return windrow_fail(WINDROW_RESOURCE, "cannot start %u threads; try fewer --threads", workers);
        }
        crew->started++;
    }
    if (!crew->threads) {
        windrow_crew_destroy(crew);
        return windrow_fail(WINDROW_RESOURCE, "out of memory while starting %u threads", workers);
    }
    *out = crew;
    return WINDROW_OK;
}

void windrow_crew_destroy(struct windrow_crew *crew)
{
    if (!crew)
        return;
    pthread_mutex_lock(&crew->lock);
    crew->ending = true;
    pthread_cond_broadcast(&crew->wake);
    pthread_mutex_unlock(&crew->lock);
    for (unsigned index = 0; index < crew->started; index++)
        pthread_join(crew->threads[index], NULL);
    pthread_mutex_destroy(&crew->lock);
    pthread_cond_destroy(&crew->wake);
    pthread_cond_destroy(&crew->done);
    free(crew->threads);
    free(crew);
}

unsigned windrow_crew_workers(const struct windrow_crew *crew)
{
    return crew->workers;
}

enum windrow_status windrow_crew_run(struct windrow_crew *crew, uint64_t task_count, windrow_crew_task task, void *context)
{
    crew->task = task;
    crew->context = context;
    crew->task_count = task_count;
    atomic_store(&crew->next, 0);
    atomic_store(&crew->failed, false);
    crew->status = WINDROW_OK;
    bool alone = crew->started == 0 || task_count <= 1;
    if (!alone) {
        pthread_mutex_lock(&crew->lock);
        crew->busy = crew->started;
        crew->round++;
        pthread_cond_broadcast(&crew->wake);
        pthread_mutex_unlock(&crew->lock);
    }
    work(crew, 0);
    if (!alone) {
        pthread_mutex_lock(&crew->lock);
        while (crew->busy)
            pthread_cond_wait(&crew->done, &crew->lock);
        pthread_mutex_unlock(&crew->lock);
    }
    if (crew->status)
        windrow_message_set(crew->message);
    return crew->status;
}

unsigned windrow_crew_default_workers(void)
{
    cpu_set_t set;
    if (sched_getaffinity(0, sizeof set, &set) == 0)
        return (unsigned)CPU_COUNT(&set);
    return 1;
}
