#include "witness.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include <igraph/igraph.h>

static void expect_done(igraph_error_t error)
{
    if (error != IGRAPH_SUCCESS)
        fail_msg("igraph: %s", igraph_strerror(error));
}

void witness_rank(const struct graph *graph, double beta, long double *scores)
{
    igraph_vector_int_t ends;
    igraph_vector_t result;
    igraph_t web;
    igraph_real_t eigenvalue;
    expect_done(igraph_vector_int_init(&ends, (igraph_integer_t)(2 * graph->link_count)));
    expect_done(igraph_vector_init(&result, 0));
    for (size_t i = 0; i < graph->link_count; i++) {
        VECTOR(ends)[2 * i] = graph->links[i].source;
        VECTOR(ends)[2 * i + 1] = graph->links[i].target;
    }
    expect_done(igraph_create(&web, &ends, graph->page_count, IGRAPH_DIRECTED));
    expect_done(igraph_pagerank(&web, IGRAPH_PAGERANK_ALGO_PRPACK, &result, &eigenvalue, igraph_vss_all(),
                                IGRAPH_DIRECTED, beta, NULL, NULL));
    for (uint32_t page = 0; page < graph->page_count; page++)
        scores[page] = VECTOR(result)[page];
    igraph_destroy(&web);
    igraph_vector_destroy(&result);
    igraph_vector_int_destroy(&ends);
}
