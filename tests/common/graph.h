/* graph: small webs for tests, as plain lists of links between numbered pages, and the dice that
 * random ones are drawn with. Nothing here comes from the library: the tests' judge
 * (oracle.h) works on these graphs alone.
 *
 * Owns its links; graph_free() gives them back. Not thread-safe.
 */
#ifndef TESTS_COMMON_GRAPH_H
#define TESTS_COMMON_GRAPH_H

#include <stddef.h>
#include <stdint.h>

struct link {
    uint32_t source;
    uint32_t target;
};

struct graph {
    uint32_t page_count;
    size_t link_count;
    size_t link_capacity;
    struct link *links;
};

/* A source of random numbers (SplitMix64: Steele, Lea & Flood 2014). The same seed gives the same
 * numbers everywhere, so that a failing test can be run again. */
struct dice {
    uint64_t state;
};

/* The kinds of random webs; each is hard in its own way. */
enum graph_kind {
    GRAPH_EVEN,    /* every link equally likely; a fifth of the pages has no out-link */
    GRAPH_SKEWED,  /* few pages get most of the links; half of the pages have no out-link */
    GRAPH_NESTED,  /* groups of eight pages that link inside and hardly out: mixes slowly */
    GRAPH_LONG,    /* a long chain with few short cuts and a closed cycle at the end */
    GRAPH_SPARSE,  /* about one link a page: many pages without in-links, many islands */
    GRAPH_KINDS
};

uint64_t dice_next(struct dice *dice);
/* A number from 0 to below `bound`, which must not be 0. */
uint32_t dice_below(struct dice *dice, uint32_t bound);

/* A web of `page_count` pages and no link. */
struct graph graph_make(uint32_t page_count);
struct graph graph_copy(const struct graph *graph);
void graph_free(struct graph *graph);

/* Adds a link; repeated and self links are kept as they come. */
void graph_link(struct graph *graph, uint32_t source, uint32_t target);

/* Adds links given in pairs: source, target, source, target … `number_count` numbers in all. */
void graph_link_pairs(struct graph *graph, const uint32_t *numbers, size_t number_count);

/* Applies the link rules: sorts the links by (source, target), drops repeated and self links. */
void graph_tidy(struct graph *graph);

/* A tidy random web of about `links_per_page` links for each page that has any. */
struct graph graph_random(struct dice *dice, enum graph_kind kind, uint32_t page_count, uint32_t links_per_page);

/* The graph with page p called renamed[p]. */
struct graph graph_rename(const struct graph *graph, const uint32_t *renamed);

/* Out-degrees, one for each page. Freed with free(). */
uint32_t *graph_out_degrees(const struct graph *graph);

#endif
