#include "examples.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "memory.h"

/* ---- printed examples ---- */

#define PAIRS(...) .pairs = (const uint32_t[]){__VA_ARGS__}, \
                   .pair_numbers = sizeof (const uint32_t[]){__VA_ARGS__} / sizeof (uint32_t)
#define VALUES(...) .values = (const struct example_value[]){__VA_ARGS__}, \
                    .page_count = sizeof (const struct example_value[]){__VA_ARGS__} / sizeof (struct example_value)
#define VECTOR(...) (const long double[]){__VA_ARGS__}
#define EXACT(score) {(score), 1e-16L}

struct printed {
    const char *name;
    const char *source;
    const uint32_t *pairs; /* source, target, source, target …; pages counted from 1 */
    size_t pair_numbers;
    const struct example_value *values;
    uint32_t page_count;
    long double beta;
    const long double *jump;
    const long double *dangling;
    bool beyond_dump;
};

static const struct printed printed_examples[] = {
    {
        .name = "six pages, one dangling",
        .source = "Langville & Meyer, Deeper inside PageRank, Internet Mathematics 1(3), 2004 (from memory)",
        PAIRS(1,2, 1,3, 3,1, 3,2, 3,5, 4,5, 4,6, 5,4, 5,6, 6,4), .beta = 0.9L,
        VALUES({.03721L, 5e-6L}, {.05396L, 5e-6L}, {.04151L, 5e-6L}, {.3751L, 5e-5L}, {.2060L, 5e-5L}, {.2862L, 5e-5L}),
    },
    {
        .name = "four pages, undamped",
        .source = "Bryan & Leise, SIAM Review 48(3), 2006 (from memory)",
        PAIRS(1,2, 1,3, 1,4, 2,3, 2,4, 3,1, 4,1, 4,3), .beta = 1, .beyond_dump = true,
        VALUES(EXACT(12.0L / 31), EXACT(4.0L / 31), EXACT(9.0L / 31), EXACT(6.0L / 31)),
    },
    {
        .name = "four pages, damped",
        .source = "Bryan & Leise, SIAM Review 48(3), 2006 (from memory)",
        PAIRS(1,2, 1,3, 1,4, 2,3, 2,4, 3,1, 4,1, 4,3), .beta = 0.85L,
        VALUES({.368L, 5e-4L}, {.142L, 5e-4L}, {.288L, 5e-4L}, {.202L, 5e-4L}),
    },
    {
        .name = "five pages, two islands",
        .source = "Bryan & Leise, SIAM Review 48(3), 2006 (from memory)",
        PAIRS(1,2, 2,1, 3,4, 4,3, 5,3, 5,4), .beta = 0.85L,
        VALUES(EXACT(.2L), EXACT(.2L), EXACT(.285L), EXACT(.285L), EXACT(.03L)),
    },
    {
        .name = "three pages with a spider trap",
        .source = "Leskovec, Rajaraman & Ullman, Mining of Massive Datasets, link analysis (partly from memory)",
        PAIRS(1,1, 1,2, 2,1, 2,3, 3,3), .beta = 0.8L, .beyond_dump = true,
        VALUES(EXACT(7.0L / 33), EXACT(5.0L / 33), EXACT(21.0L / 33)),
    },
    {
        .name = "four pages with a spider trap",
        .source = "Leskovec, Rajaraman & Ullman, Mining of Massive Datasets, link analysis (partly from memory)",
        PAIRS(1,2, 1,3, 1,4, 2,1, 2,4, 3,3, 4,2, 4,3), .beta = 0.8L, .beyond_dump = true,
        VALUES(EXACT(15.0L / 148), EXACT(19.0L / 148), EXACT(95.0L / 148), EXACT(19.0L / 148)),
    },
    {
        .name = "eleven pages",
        .source = "widely reprinted; values from memory",
        PAIRS(2,3, 3,2, 4,1, 4,2, 5,2, 5,4, 5,6, 6,2, 6,5, 7,2, 7,5, 8,2, 8,5, 9,2, 9,5, 10,5, 11,5), .beta = 0.85L,
        VALUES({.033L, 5e-4L}, {.384L, 5e-4L}, {.343L, 5e-4L}, {.039L, 5e-4L}, {.081L, 5e-4L}, {.039L, 5e-4L},
               {.016L, 5e-4L}, {.016L, 5e-4L}, {.016L, 5e-4L}, {.016L, 5e-4L}, {.016L, 5e-4L}),
    },
    {
        .name = "seven pages with self links",
        .source = "Manning, Raghavan & Schütze, Introduction to Information Retrieval, ch. 21 (from memory)",
        PAIRS(1,3, 2,2, 2,3, 3,1, 3,3, 3,4, 4,4, 4,5, 5,7, 6,6, 6,7, 7,4, 7,5, 7,7), .beta = 0.86L, .beyond_dump = true,
        VALUES({.05L, 5e-3L}, {.04L, 5e-3L}, {.11L, 5e-3L}, {.25L, 5e-3L}, {.21L, 5e-3L}, {.04L, 5e-3L}, {.31L, 5e-3L}),
    },
    {
        .name = "two pages, the dangling one jumps by the jump vector",
        .source = "closed form: nobody leaves page 2",
        PAIRS(1,2), .beta = 0.85L, .jump = VECTOR(0, 1), .dangling = VECTOR(0, 1), .beyond_dump = true,
        VALUES({0, 0}, EXACT(1)),
    },
    {
        .name = "two pages, the dangling one jumps uniformly",
        .source = "closed form: x1 = beta/2 x2, so x1 = (beta/2)/(1 + beta/2)",
        PAIRS(1,2), .beta = 0.85L, .jump = VECTOR(0, 1), .dangling = VECTOR(.5L, .5L), .beyond_dump = true,
        VALUES({.29825L, 5e-6L}, {.70175L, 5e-6L}),
    },
};

static long double *vector_copy(const long double *vector, uint32_t page_count)
{
    if (vector == NULL)
        return NULL;
    long double *copy = memory_array(page_count, sizeof *copy);
    memcpy(copy, vector, page_count * sizeof *copy);
    return copy;
}

static struct example printed_example(const struct printed *printed)
{
    struct example example = {
        .name = printed->name,
        .source = printed->source,
        .graph = graph_make(printed->page_count),
        .beta = printed->beta,
        .jump = vector_copy(printed->jump, printed->page_count),
        .dangling = vector_copy(printed->dangling, printed->page_count),
        .values = memory_array(printed->page_count, sizeof *example.values),
        .fits_dump = !printed->beyond_dump,
    };
    for (size_t i = 0; i < printed->pair_numbers; i += 2)
        graph_link(&example.graph, printed->pairs[i] - 1, printed->pairs[i + 1] - 1);
    memcpy(example.values, printed->values, printed->page_count * sizeof *example.values);
    return example;
}

/* ---- closed forms: each is solved from its own symmetry in a line or two ---- */

enum closed_form { CYCLE, COMPLETE, HUB_AND_BACK, LEAVES_TO_HUB, HUB_TO_LEAVES, CHAIN, FARM, TEN_LINKS };

struct closed {
    const char *name;
    enum closed_form form;
    uint32_t page_count;
    long double beta;
};

static const struct closed closed_examples[] = {
    {"cycle of 7", CYCLE, 7, 0.85L},
    {"cycle of 50", CYCLE, 50, 0.99L},
    {"complete graph of 9", COMPLETE, 9, 0.85L},
    {"hub and 20 leaves that link back", HUB_AND_BACK, 21, 0.85L},
    {"hub and 3 leaves that link back", HUB_AND_BACK, 4, 0.5L},
    {"12 leaves to a dangling hub", LEAVES_TO_HUB, 13, 0.85L},
    {"hub to 30 dangling leaves", HUB_TO_LEAVES, 31, 0.85L},
    {"chain of 40, the last dangling", CHAIN, 40, 0.85L},
    {"chain of 200, the last dangling", CHAIN, 200, 0.95L},
    {"farm of 25 boosters in a web of 100", FARM, 100, 0.85L},
    {"a page with ten links", TEN_LINKS, 11, 0.85L},
};

#define FARM_BOOSTERS 25

static void closed_links(struct graph *graph, enum closed_form form)
{
    uint32_t n = graph->page_count;
    for (uint32_t page = 0; page < n; page++) {
        if (form == CYCLE)
            graph_link(graph, page, (page + 1) % n);
        for (uint32_t other = 0; form == COMPLETE && other < n; other++)
            if (other != page)
                graph_link(graph, page, other);
        if ((form == HUB_AND_BACK || form == LEAVES_TO_HUB) && page > 0)
            graph_link(graph, page, 0);
        if ((form == HUB_AND_BACK || form == HUB_TO_LEAVES || form == TEN_LINKS) && page > 0)
            graph_link(graph, 0, page);
        if (form == CHAIN && page + 1 < n)
            graph_link(graph, page, page + 1);
        if (form == FARM && page > 0 && page <= FARM_BOOSTERS) {
            graph_link(graph, page, 0);
            graph_link(graph, 0, page);
        }
        if (form == FARM && page > FARM_BOOSTERS) /* the rest of the web: a cycle, nothing dangles */
            graph_link(graph, page, page + 1 < n ? page + 1 : FARM_BOOSTERS + 1);
    }
}

static void closed_values(const struct closed *closed, struct example_value *values)
{
    long double n = closed->page_count, beta = closed->beta, jump = (1 - beta) / n;
    long double m = FARM_BOOSTERS, first = 0, sum = 0;
    for (uint32_t page = 0; page < closed->page_count; page++) {
        long double score = 1 / n; /* cycle, complete graph, the rest of the farm's web */
        switch (closed->form) {
        case HUB_AND_BACK:
            first = (jump + beta) / (1 + beta);
            score = page == 0 ? first : (1 - first) / (n - 1);
            break;
        case LEAVES_TO_HUB:
            first = (jump + beta) / (1 + beta - beta / n);
            score = page == 0 ? first : (1 - first) / (n - 1);
            break;
        case HUB_TO_LEAVES:
        case TEN_LINKS: /* common practice, no source: each of ten links gets a tenth of beta·x */
            first = 1 / (n + beta);
            score = page == 0 ? first : first + beta * first / (n - 1);
            break;
        case CHAIN:
            score = 1 - powl(beta, page + 1);
            break;
        case FARM:
            first = (1 - beta) * (1 + beta * m) / (n * (1 - beta * beta));
            if (page <= FARM_BOOSTERS)
                score = page == 0 ? first : jump + beta * first / m;
            break;
        default:
            break;
        }
        values[page] = (struct example_value){score, 1e-16L};
        sum += score;
    }
    for (uint32_t page = 0; closed->form == CHAIN && page < closed->page_count; page++)
        values[page].score /= sum;
}

static struct example closed_example(const struct closed *closed)
{
    struct example example = {
        .name = closed->name,
        .source = "closed form",
        .graph = graph_make(closed->page_count),
        .beta = closed->beta,
        .values = memory_array(closed->page_count, sizeof *example.values),
        .fits_dump = true,
    };
    closed_links(&example.graph, closed->form);
    closed_values(closed, example.values);
    return example;
}

/* ---- all of them ---- */

#define PRINTED_COUNT (sizeof printed_examples / sizeof *printed_examples)
#define CLOSED_COUNT (sizeof closed_examples / sizeof *closed_examples)

unsigned example_count(void)
{
    return PRINTED_COUNT + CLOSED_COUNT;
}

struct example example_get(unsigned index)
{
    if (index < PRINTED_COUNT)
        return printed_example(&printed_examples[index]);
    return closed_example(&closed_examples[index - PRINTED_COUNT]);
}

void example_free(struct example *example)
{
    graph_free(&example->graph);
    free(example->jump);
    free(example->dangling);
    free(example->values);
}

struct oracle_question example_question(const struct example *example)
{
    return (struct oracle_question){&example->graph, example->beta, example->jump, example->dangling};
}
