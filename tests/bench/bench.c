#include "bench.h"

#include "base/file.h"
#include "store/inlinks.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <sys/resource.h>

void bench_expect(enum windrow_status status, const char *what)
{
    if (!status)
        return;
    fprintf(stderr, "bench: %s: %s\n", what, windrow_message());
    exit(status);
}

void bench_usage(const char *text)
{
    fprintf(stderr, "usage: %s\n", text);
    exit(WINDROW_USAGE);
}

void *bench_memory(uint64_t count, uint64_t object_bytes)
{
    uint64_t bytes = (count + 1) * object_bytes;
    void *memory = mmap(NULL, bytes, PROT_READ | PROT_WRITE, MAP_PRIVATE | MAP_ANONYMOUS, -1, 0);
    if (memory == MAP_FAILED) {
        fprintf(stderr, "bench: no memory for %llu bytes\n", (unsigned long long)bytes);
        exit(WINDROW_RESOURCE);
    }
    madvise(memory, bytes, MADV_HUGEPAGE);
    return memory;
}

void bench_memory_free(void *memory, uint64_t count, uint64_t object_bytes)
{
    munmap(memory, (count + 1) * object_bytes);
}

struct bench_store bench_store_open(const char *path)
{
    struct bench_store opened = {.path = path};
    bench_expect(windrow_store_open(path, &opened.store), path);
    windrow_web_of_store(opened.store, &opened.web);
    bench_expect(windrow_web_check(&opened.web), path);
    if (opened.web.pages > UINT32_MAX)
        bench_expect(windrow_fail(WINDROW_RESOURCE, "more pages than 32 bits can number"), path);
    return opened;
}

struct bench_links bench_links_load(const struct bench_store *store, enum windrow_block_kind kind)
{
    uint64_t targets = kind == WINDROW_BLOCK_CORE ? store->web.core_pages : store->web.pages - store->web.core_pages;
    struct bench_links links = {
        .targets = targets,
        .starts = bench_memory(targets + 1, sizeof *links.starts),
        .sources = bench_memory(store->web.links[kind], sizeof *links.sources),
    };
    struct windrow_inlinks inlinks;
    uint64_t count = 0, target = 0;
    windrow_inlinks_begin(&inlinks, store->store, kind, 0);
    for (;;) {
        bench_expect(windrow_inlinks_next(&inlinks), store->path);
        if (inlinks.ended)
            break;
        while (target < inlinks.target)
            links.starts[++target] = count;
        for (uint64_t i = 0; i < inlinks.count; i++)
            links.sources[count++] = (uint32_t)inlinks.sources[i];
    }
    while (target < targets)
        links.starts[++target] = count;
    windrow_inlinks_end(&inlinks);
    return links;
}

struct bench_pages bench_pages_load(const struct bench_store *store)
{
    struct bench_pages pages = {{
        bench_memory(store->web.core_pages, sizeof(uint32_t)),
        bench_memory(store->web.pages - store->web.core_pages, sizeof(uint32_t)),
    }};
    for (uint64_t page = 0; page < store->web.pages; page++) {
        uint64_t number;
        bool core = windrow_store_page_number(store->store, page, &number);
        pages.of[core ? WINDROW_BLOCK_CORE : WINDROW_BLOCK_RIM][number] = (uint32_t)page;
    }
    return pages;
}

void bench_times_add(struct bench_times *times, double seconds)
{
    if (times->count < BENCH_ROUNDS_MOST)
        times->seconds[times->count++] = seconds;
}

static int compare(const void *a, const void *b)
{
    double left = *(const double *)a, right = *(const double *)b;
    return (left > right) - (left < right);
}

double bench_times_median(const struct bench_times *times)
{
    double sorted[BENCH_ROUNDS_MOST];
    memcpy(sorted, times->seconds, sizeof sorted);
    qsort(sorted, times->count, sizeof *sorted, compare);
    return times->count ? (sorted[(times->count - 1) / 2] + sorted[times->count / 2]) / 2 : 0;
}

double bench_times_least(const struct bench_times *times)
{
    double least = times->seconds[0];
    for (unsigned i = 1; i < times->count; i++)
        if (times->seconds[i] < least)
            least = times->seconds[i];
    return least;
}

double bench_cpu_seconds(void)
{
    struct rusage usage;
    getrusage(RUSAGE_SELF, &usage);
    return (double)(usage.ru_utime.tv_sec + usage.ru_stime.tv_sec) + (double)(usage.ru_utime.tv_usec + usage.ru_stime.tv_usec) * 1e-6;
}

void bench_peak_forget(void)
{
    FILE *file = fopen("/proc/self/clear_refs", "w");
    if (file) {
        fputs("5", file);
        fclose(file);
    }
}

uint64_t bench_peak_bytes(void)
{
    char line[256];
    unsigned long long kilobytes = 0;
    FILE *file = fopen("/proc/self/status", "r");
    while (file && fgets(line, sizeof line, file))
        if (sscanf(line, "VmHWM: %llu kB", &kilobytes) == 1)
            break;
    if (file)
        fclose(file);
    return kilobytes * 1024;
}
