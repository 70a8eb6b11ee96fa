#include "answer/ranking.h"

#include <stdlib.h>

enum windrow_status windrow_ranking_open(const char *store, const char *run, struct windrow_ranking **out)
{
    *out = NULL;
    struct windrow_ranking *ranking = calloc(1, sizeof *ranking);
    if (!ranking)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while opening %s", store);
    enum windrow_status status;
    if ((status = windrow_store_open(store, &ranking->store)))
        goto out;
    if ((status = windrow_run_open(ranking->store, run, &ranking->run)))
        goto out;
    ranking->pages = windrow_store_facts(ranking->store)->pages;
    ranking->scores = windrow_run_scores(ranking->run);
    ranking->order = windrow_run_order(ranking->run);
    ranking->bounds = (struct windrow_bounds){windrow_run_interval, ranking->run};
    if (!windrow_run_facts(ranking->run)->certified) {
        status = windrow_fail(WINDROW_NO, "%s is not ranked yet: nothing is proven so far", store);
        goto out;
    }
    if ((status = windrow_page_reader_create(ranking->store, &ranking->reader)))
        goto out;
    *out = ranking;
out:
    if (status)
        windrow_ranking_close(ranking);
    return status;
}

void windrow_ranking_close(struct windrow_ranking *ranking)
{
    if (!ranking)
        return;
    windrow_place_memory_free(&ranking->memory);
    windrow_page_reader_destroy(ranking->reader);
    windrow_run_close(ranking->run);
    windrow_store_close(ranking->store);
    free(ranking);
}

struct windrow_ranking_facts windrow_ranking_facts(const struct windrow_ranking *ranking)
{
    const struct windrow_run_facts *facts = windrow_run_facts(ranking->run);
    return (struct windrow_ranking_facts){.pages = ranking->pages, .digits = windrow_certificate_digits(&facts->certificate),
                                          .error_l1 = facts->certificate.error_l1, .finished = facts->finished};
}

struct windrow_row windrow_ranking_row(const struct windrow_ranking *ranking, double score, struct windrow_range range)
{
    return (struct windrow_row){.range_first = range.first, .range_last = range.last, .score = score,
                                .mean_multiple = score * (double)ranking->pages};
}
