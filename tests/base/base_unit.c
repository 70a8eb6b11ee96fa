/* Crews do every task once, whoever does it, and hand on the first failure; meters count and call back in turn; varints
 * come back, and cut or overlong ones are refused. */
#include "base/crew.h"
#include "base/meter.h"
#include "base/varint.h"

#include "../common/graph.h"
#include "../common/memory.h"

#include <errno.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

#include <cmocka.h>

/* ---- Crew ---- */

enum { TASKS = 1000, WORKERS_MOST = 5 };

struct job {
    atomic_uint done[TASKS];
    atomic_uint busy[WORKERS_MOST]; /* tasks that run with this worker's number now */
    unsigned workers;
    atomic_bool wrong;
    uint64_t first_bad, second_bad; /* tasks that fail */
};

static enum windrow_status do_task(void *context, uint64_t task, unsigned worker)
{
    struct job *job = context;
    if (task >= TASKS || worker >= job->workers || atomic_fetch_add(&job->busy[worker], 1))
        atomic_store(&job->wrong, true);
    atomic_fetch_add(&job->done[task], 1);
    if (task % 97 == 0)
        usleep(200);
    atomic_fetch_sub(&job->busy[worker], 1);
    if (task == job->first_bad || task == job->second_bad)
        return windrow_fail(WINDROW_INPUT, "task %d", (int)task);
    return WINDROW_OK;
}

static void test_crew(void **state)
{
    (void)state;
    for (unsigned workers = 1; workers <= WORKERS_MOST; workers++) {
        struct windrow_crew *crew;
        assert_int_equal(windrow_crew_create(workers, &crew), WINDROW_OK);
        assert_int_equal(windrow_crew_workers(crew), workers);
        static const uint64_t counts[] = {TASKS, 0, 1, 2, TASKS}; /* one crew, used again and again */
        for (size_t round = 0; round < sizeof counts / sizeof *counts; round++) {
            struct job *job = memory_array(1, sizeof *job);
            job->workers = workers;
            job->first_bad = job->second_bad = UINT64_MAX;
            assert_int_equal(windrow_crew_run(crew, counts[round], do_task, job), WINDROW_OK);
            for (uint64_t task = 0; task < TASKS; task++)
                assert_int_equal(job->done[task], task < counts[round]);
            assert_false(job->wrong);
            free(job);
        }
        windrow_crew_destroy(crew);
    }
    windrow_crew_destroy(NULL);
}

static void test_crew_failures(void **state)
{
    (void)state;
    for (unsigned workers = 1; workers <= WORKERS_MOST; workers++) {
        struct windrow_crew *crew;
        assert_int_equal(windrow_crew_create(workers, &crew), WINDROW_OK);
        for (uint64_t bad = 0; bad < 500; bad += 97) {
            struct job *job = memory_array(1, sizeof *job);
            char expected[32];
            job->workers = workers;
            job->first_bad = bad;
            job->second_bad = bad + 300; /* far behind: never begun before the first has failed */
            assert_int_equal(windrow_crew_run(crew, TASKS, do_task, job), WINDROW_INPUT);
            snprintf(expected, sizeof expected, "task %d", (int)bad);
            assert_string_equal(windrow_message(), expected);
            /* Tasks are handed out in order: all before it ran, and few behind. */
            unsigned behind = 0;
            for (uint64_t task = 0; task < TASKS; task++) {
                if (task <= bad)
                    assert_int_equal(job->done[task], 1);
                else
                    behind += job->done[task];
            }
            assert_true(workers > 1 || behind == 0);
            /* The crew is as good as new. */
            job->first_bad = job->second_bad = UINT64_MAX;
            assert_int_equal(windrow_crew_run(crew, TASKS, do_task, job), WINDROW_OK);
            free(job);
        }
        windrow_crew_destroy(crew);
    }
}

/* ---- Errors ---- */

static void test_messages(void **state)
{
    (void)state;
    assert_int_equal(windrow_fail(WINDROW_INPUT, "line %d", 7), WINDROW_INPUT);
    assert_int_equal(windrow_fail_within(WINDROW_DAMAGED, "file %s", "f"), WINDROW_DAMAGED);
    assert_string_equal(windrow_message(), "file f: line 7");
    windrow_fail(WINDROW_INPUT, "again: %s", windrow_message());
    assert_string_equal(windrow_message(), "again: file f: line 7");
    assert_int_equal(windrow_fail_system(WINDROW_DAMAGED, EIO, "x"), WINDROW_DAMAGED);
    assert_int_equal(windrow_fail_system(WINDROW_DAMAGED, ENOSPC, "x"), WINDROW_RESOURCE);
    assert_non_null(strstr(windrow_message(), strerror(ENOSPC)));
    char *longest = memory_array(3 * WINDROW_MESSAGE_BYTES, 1);
    memset(longest, 'y', 3 * WINDROW_MESSAGE_BYTES - 1);
    windrow_fail(WINDROW_INPUT, "%s", longest);
    assert_int_equal(strlen(windrow_message()), WINDROW_MESSAGE_BYTES - 1);
    windrow_fail_within(WINDROW_INPUT, "front");
    assert_memory_equal(windrow_message(), "front: yyy", 10);
    windrow_fail_within(WINDROW_INPUT, "%s", longest);
    assert_int_equal(strlen(windrow_message()), WINDROW_MESSAGE_BYTES - 1);
    windrow_fail_system(WINDROW_INPUT, EIO, "%s", longest);
    assert_non_null(strstr(windrow_message(), strerror(EIO))); /* the reason is not what is cut */
    free(longest);
}

/* ---- Meter ---- */

struct listener {
    atomic_uint inside, calls, ends;
    atomic_bool twice;
    struct windrow_progress last;
};

static void listen(void *context, const struct windrow_progress *progress)
{
    struct listener *listener = context;
    if (atomic_fetch_add(&listener->inside, 1))
        atomic_store(&listener->twice, true);
    atomic_fetch_add(&listener->calls, 1);
    atomic_fetch_add(&listener->ends, progress->stage_ended);
    listener->last = *progress;
    usleep(100);
    atomic_fetch_sub(&listener->inside, 1);
}

static enum windrow_status count_units(void *context, uint64_t task, unsigned worker)
{
    (void)task;
    (void)worker;
    windrow_meter_add(context, 3);
    return WINDROW_OK;
}

static void test_meter(void **state)
{
    (void)state;
    struct listener listener = {0};
    atomic_bool stop = false;
    struct windrow_watch watch = {.listener = listen, .context = &listener, .stop = &stop};
    struct windrow_meter meter;
    struct windrow_crew *crew;
    assert_int_equal(windrow_crew_create(4, &crew), WINDROW_OK);
    windrow_meter_start(&meter, &watch);
    windrow_meter_stage(&meter, "counting", "units", 3 * TASKS);
    assert_int_equal(windrow_crew_run(crew, TASKS, count_units, &meter), WINDROW_OK);
    windrow_meter_stage_end(&meter);
    assert_false(listener.twice);
    assert_true(listener.calls > 1);
    assert_int_equal(listener.ends, 1);
    assert_string_equal(listener.last.stage, "counting");
    assert_string_equal(listener.last.unit, "units");
    assert_int_equal(listener.last.done, 3 * TASKS);
    assert_int_equal(listener.last.total, 3 * TASKS);
    assert_true(listener.last.share == 1 && listener.last.seconds_left == 0 && listener.last.rate > 0);
    assert_false(windrow_meter_stopping(&meter));
    atomic_store(&stop, true);
    assert_true(windrow_meter_stopping(&meter));
    /* A stage without a total has no share; a long interval keeps quiet until its end. */
    meter.watch.interval_seconds = 1000;
    listener.calls = 0;
    windrow_meter_stage(&meter, "guessing", "units", 0);
    for (int index = 0; index < 100; index++)
        windrow_meter_add(&meter, 1);
    assert_int_equal(listener.calls, 0);
    windrow_meter_stage_end(&meter);
    assert_int_equal(listener.calls, 1);
    assert_true(listener.last.share < 0 && listener.last.seconds_left < 0);
    assert_int_equal(listener.last.done, 100);
    windrow_meter_finish(&meter);
    /* Nobody watches. */
    windrow_meter_start(&meter, &(struct windrow_watch){0});
    windrow_meter_stage(&meter, "alone", "units", 1);
    windrow_meter_add(&meter, 1);
    windrow_meter_stage_end(&meter);
    assert_false(windrow_meter_stopping(&meter));
    windrow_meter_finish(&meter);
    windrow_crew_destroy(crew);
}

/* ---- Varints ---- */

static void check_varint(uint64_t value)
{
    uint8_t bytes[WINDROW_VARINT_BYTES_MAX];
    uint64_t found;
    size_t count = (size_t)(windrow_varint_put(bytes, value) - bytes);
    assert_true(count <= WINDROW_VARINT_BYTES_MAX);
    assert_int_equal(count, value ? (70 - (size_t)__builtin_clzll(value)) / 7 : 1);
    assert_ptr_equal(windrow_varint_get(bytes, bytes + count, &found), bytes + count);
    assert_true(found == value);
    for (size_t cut = 0; cut < count; cut++) { /* in memory of its own, where reading beyond would be noticed */
        uint8_t *exact = memory_array(cut + !cut, 1);
        memcpy(exact, bytes, cut);
        assert_null(windrow_varint_get(exact, exact + cut, &found));
        free(exact);
    }
}

static void test_varints(void **state)
{
    (void)state;
    struct dice dice = {101};
    for (unsigned bit = 0; bit < 64; bit++)
        for (int near = -1; near <= 1; near++)
            check_varint((UINT64_C(1) << bit) + (uint64_t)(int64_t)near);
    check_varint(UINT64_MAX);
    for (int round = 0; round < 1000; round++)
        check_varint(dice_next(&dice) >> dice_below(&dice, 64));
    /* Longer than 64 bits: a tenth byte of more than one bit, or an eleventh byte. */
    uint8_t overlong[12];
    uint64_t found;
    memset(overlong, 0xff, sizeof overlong);
    overlong[9] = 2;
    assert_null(windrow_varint_get(overlong, overlong + 10, &found));
    overlong[9] = 0x80;
    overlong[10] = 0;
    assert_null(windrow_varint_get(overlong, overlong + 11, &found));
    overlong[9] = 1;
    assert_ptr_equal(windrow_varint_get(overlong, overlong + 10, &found), overlong + 10);
    assert_true(found == UINT64_MAX);
}

static void test_zigzag(void **state)
{
    (void)state;
    struct dice dice = {102};
    assert_int_equal(windrow_zigzag(5, 5), 0);
    assert_int_equal(windrow_zigzag(4, 5), 1);
    assert_int_equal(windrow_zigzag(6, 5), 2);
    for (int round = 0; round < 1000; round++) {
        uint64_t from = dice_next(&dice) >> dice_below(&dice, 64), to = dice_next(&dice) >> dice_below(&dice, 64);
        assert_true(windrow_unzigzag(from, windrow_zigzag(to, from)) == to);
    }
    assert_true(windrow_unzigzag(0, windrow_zigzag(UINT64_MAX, 0)) == UINT64_MAX);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_crew),  cmocka_unit_test(test_crew_failures), cmocka_unit_test(test_messages),
        cmocka_unit_test(test_meter), cmocka_unit_test(test_varints),       cmocka_unit_test(test_zigzag),
    };
    return cmocka_run_group_tests_name("base", tests, NULL, NULL);
}
