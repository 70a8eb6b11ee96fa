/* examples: small webs whose PageRank is published or known in closed form, each with its source.
 * oracle_unit.c holds the judge against all of them, outside/examples_run.c the built program
 * against those that a dump can say, and a solver's unit test may use the rest.
 */
#ifndef TESTS_COMMON_EXAMPLES_H
#define TESTS_COMMON_EXAMPLES_H

#include <stdbool.h>

#include "graph.h"
#include "oracle.h"

struct example_value {
    long double score;
    long double tolerance; /* half a unit of the last printed digit, or the rounding of an exact value */
};

struct example {
    const char *name;
    const char *source;        /* where the values come from */
    struct graph graph;        /* self links are kept where the source has them */
    long double beta;
    long double *jump;         /* NULL: uniform */
    long double *dangling;     /* NULL: uniform */
    struct example_value *values; /* one a page */
    bool fits_dump;            /* beta < 1, uniform vectors, no self link: `shard` and `rank` can tell it */
};

/* Number of examples, and a fresh copy of one of them, freed with example_free(). */
unsigned example_count(void);
struct example example_get(unsigned index);
void example_free(struct example *example);

/* The example as a question to the judge; valid as long as the example is. */
struct oracle_question example_question(const struct example *example);

#endif
