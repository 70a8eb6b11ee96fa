/* igraph_bench: the same ranking by igraph's prpack, the graph already in its memory.
 *
 *     igraph_bench STORE BETA
 *
 * Prints four lines: seconds of the solve alone, and its CPU seconds; the peak of resident memory in bytes while
 * solving (graph included, loading not); and the L1 distance of its scores from those of the store's run `main`.
 */
#include "bench.h"

#include "base/meter.h"
#include "rank/run.h"

#include <igraph/igraph.h>
#include <malloc.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>

static void expect_done(igraph_error_t error)
{
    if (error == IGRAPH_SUCCESS)
        return;
    fprintf(stderr, "igraph_bench: %s\n", igraph_strerror(error));
    exit(WINDROW_RESOURCE);
}

static void load(const struct bench_store *store, igraph_t *graph)
{
    struct bench_pages pages = bench_pages_load(store);
    igraph_vector_int_t ends;
    igraph_integer_t at = 0;
    expect_done(igraph_vector_int_init(&ends, (igraph_integer_t)(2 * (store->web.links[0] + store->web.links[1]))));
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++) {
        struct bench_links links = bench_links_load(store, kind);
        for (uint64_t target = 0; target < links.targets; target++)
            for (uint64_t i = links.starts[target]; i < links.starts[target + 1]; i++) {
                VECTOR(ends)[at++] = pages.of[WINDROW_BLOCK_CORE][links.sources[i]];
                VECTOR(ends)[at++] = pages.of[kind][target];
            }
        bench_memory_free(links.starts, links.targets + 1, sizeof *links.starts);
        bench_memory_free(links.sources, store->web.links[kind], sizeof *links.sources);
    }
    expect_done(igraph_create(graph, &ends, (igraph_integer_t)store->web.pages, IGRAPH_DIRECTED));
    igraph_vector_int_destroy(&ends);
    bench_memory_free(pages.of[0], store->web.core_pages, sizeof(uint32_t));
    bench_memory_free(pages.of[1], store->web.pages - store->web.core_pages, sizeof(uint32_t));
    malloc_trim(0);
}

int main(int argc, char **argv)
{
    if (argc != 3)
        bench_usage("igraph_bench STORE BETA");
    struct bench_store store = bench_store_open(argv[1]);
    igraph_t graph;
    igraph_vector_t scores;
    igraph_real_t eigenvalue;
    load(&store, &graph);
    expect_done(igraph_vector_init(&scores, 0));
    bench_peak_forget();
    double began = windrow_seconds(), cpu = bench_cpu_seconds();
    expect_done(igraph_pagerank(&graph, IGRAPH_PAGERANK_ALGO_PRPACK, &scores, &eigenvalue, igraph_vss_all(), IGRAPH_DIRECTED,
                                strtod(argv[2], NULL), NULL, NULL));
    printf("%.3f\n%.3f\n%llu\n", windrow_seconds() - began, bench_cpu_seconds() - cpu, (unsigned long long)bench_peak_bytes());
    struct windrow_run *run;
    double distance = NAN;
    if (!windrow_run_open(store.store, NULL, &run)) {
        const double *ours = windrow_run_scores(run);
        for (uint64_t page = 0; ours && page < store.web.pages; page++)
            distance = (page ? distance : 0) + fabs(ours[page] - VECTOR(scores)[page]);
        windrow_run_close(run);
    }
    printf("%.3g\n", distance);
    igraph_vector_destroy(&scores);
    igraph_destroy(&graph);
    windrow_store_close(store.store);
    return 0;
}
