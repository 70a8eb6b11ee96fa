/* ranking: a random web told to the built program, and its answer read back.
 *
 * Anything unexpected fails the running test. What is handed out is owned by the caller.
 */
#ifndef TESTS_COMMON_RANKING_H
#define TESTS_COMMON_RANKING_H

#include <stddef.h>
#include <stdint.h>

#include "graph.h"

/* One row of `score`. */
struct ranked_page {
    const char *url;
    uint64_t place;
    uint64_t range_first, range_last; /* equal when the place is proven */
    double score;
    double mean_multiple;
};

struct ranking {
    size_t page_count;
    struct ranked_page *pages;
    char *text; /* what the rows point into */
};

/* Reads the text of `score` (taken over, '\0' at its end), checking the header and every field. */
struct ranking ranking_parse(char *text);
void ranking_free(struct ranking *ranking);

/* `windrow score STORE --all`, of run `run_name` (NULL: the default one). */
struct ranking ranking_read(const char *store, const char *run_name);

/* What `status --json` says the error can be at most. */
struct certificate {
    double error_l1;
    double alpha;
    double rho;
    double digits;
    uint64_t pages;
    uint64_t links;
};
struct certificate certificate_read(const char *store, const char *run_name);

/* How page numbers become URLs. */
enum naming {
    NAMING_FEW_HOSTS,  /* consecutive pages share a host, hosts are of uneven size */
    NAMING_SCATTERED,  /* another assignment to other hosts, in another order */
    NAMING_ONE_HOST,
    NAMING_HOST_EACH
};
#define NAMING_BYTES 64
void naming_write(char url[NAMING_BYTES], enum naming naming, uint32_t page);

/* Writes a web as a dump of pairs; pages without links stand as sources alone, so that every page
 * is in the store. */
void ranking_write_dump(const char *path, const struct graph *graph, enum naming naming);

/* Shards and ranks the web in `directory`/`name`, and gives its scores by page number. */
void ranking_ask(const char *directory, const char *name, const struct graph *graph, enum naming naming, double beta,
                 const char *digits, long double *scores, struct certificate *certificate);

/* Fails the test unless the scores are the judge's within the certificate, page by page, and the
 * certificate proves `digits` digits. Allows for the rounding of 17 printed digits. */
void ranking_expect_certified(const char *what, const long double *scores, const long double *truth,
                              size_t page_count, const struct certificate *certificate, double digits);

#endif
