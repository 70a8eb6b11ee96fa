/* bench: what the measuring programs share. A program that cannot measure has nothing to say: every failure here
 * prints the reason and ends the process. */
#ifndef TESTS_BENCH_BENCH_H
#define TESTS_BENCH_BENCH_H

#include "base/crew.h"
#include "base/error.h"
#include "sweep/web.h"

/* Ends the process with the thread's message unless status is WINDROW_OK. */
void bench_expect(enum windrow_status status, const char *what);
/* Ends the process with how the program is called. */
void bench_usage(const char *text) __attribute__((noreturn));

/* Memory of `count` objects that is not touched yet, in large pages where the system has them, as the solver's
 * own vectors are. */
void *bench_memory(uint64_t count, uint64_t object_bytes);
/* Gives memory of that many back. */
void bench_memory_free(void *memory, uint64_t count, uint64_t object_bytes);

/* A store that passed the checks that ranking makes. */
struct bench_store {
    const char *path;
    struct windrow_store *store;
    struct windrow_web web;
};
struct bench_store bench_store_open(const char *path);

/* In-links of all targets of one kind as two arrays: target t's sources are sources[starts[t]] to before
 * sources[starts[t + 1]]. Core numbers, which must stay below 2^32. */
struct bench_links {
    uint64_t targets;
    uint64_t *starts;
    uint32_t *sources;
};
struct bench_links bench_links_load(const struct bench_store *store, enum windrow_block_kind kind);

/* Page ids by core number and by rim number; below 2^32. */
struct bench_pages {
    uint32_t *of[WINDROW_BLOCK_KINDS];
};
struct bench_pages bench_pages_load(const struct bench_store *store);

/* Times of one thing, measured again and again. */
enum { BENCH_ROUNDS_MOST = 64 };
struct bench_times {
    unsigned count;
    double seconds[BENCH_ROUNDS_MOST];
};
void bench_times_add(struct bench_times *times, double seconds);
double bench_times_median(const struct bench_times *times);
double bench_times_least(const struct bench_times *times);

/* CPU seconds of this process so far, user and system. */
double bench_cpu_seconds(void);

/* Forgets the process's peak of resident memory, so that bench_peak_bytes() tells of what follows. */
void bench_peak_forget(void);
/* The peak since then, from /proc/self/status. */
uint64_t bench_peak_bytes(void);

#endif
