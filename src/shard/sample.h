/* sample: how many distinct things there are in a stream, in bounded memory, and how many there would be
 * in the whole of which only some places were read.
 *
 * Hash sampling: of all things met, those are kept whose group's hash lies below a threshold, which is halved
 * whenever they outgrow the memory (Wegman's adaptive sampling: Flajolet 1990, "On adaptive sampling"). What is kept depends
 * on the set of things alone, not on their order or number; kept × 2^halvings is an unbiased count with a relative
 * error near 1/sqrt(kept). Things of one group are kept or dropped together, so that members of a group can be
 * counted as well.
 *
 * Places: each thing remembers in how many places (stretches of a dump) it was met, for up to three aspects (pages: at
 * all; as a source; as a source with links). From these incidences windrow_sample_estimate() bounds the number
 * in the whole.
 *
 * Threads: a sample belongs to one thread; windrow_sample_join() puts two together.
 */
#ifndef WINDROW_SHARD_SAMPLE_H
#define WINDROW_SHARD_SAMPLE_H

#include "base/error.h"

enum windrow_sample_aspect { WINDROW_SAMPLE_MET, WINDROW_SAMPLE_CRAWLED, WINDROW_SAMPLE_LINKING, WINDROW_SAMPLE_ASPECTS };

struct windrow_sample_entry {
    uint64_t group, identity;
    uint64_t note[2];                             /* the caller's */
    uint32_t last_place[WINDROW_SAMPLE_ASPECTS];  /* up to place_count of the estimate */
    uint8_t places[WINDROW_SAMPLE_ASPECTS];       /* 255: that many or more */
};

struct windrow_sample {
    struct windrow_sample_entry *entries;
    uint32_t *slots;       /* entry + 1; 0: free */
    uint32_t count, most, slot_mask;
    unsigned halvings;
};

/* Room for `most` entries (at least 16), windrow_sample_bytes() in all. All zero is an empty sample without room. */
enum windrow_status windrow_sample_create(struct windrow_sample *sample, uint32_t most);
void windrow_sample_free(struct windrow_sample *sample);
uint64_t windrow_sample_bytes(uint32_t most);

/* The entry of a thing, new (with no places) or known; NULL when it is not among those kept. Valid until the next call.
 * Both hashes are 64 bits that look random; two things with equal identities count as one. */
struct windrow_sample_entry *windrow_sample_meet(struct windrow_sample *sample, uint64_t group, uint64_t identity);
/* The entry of a thing that was met before; NULL when it is not kept, or was not met. */
const struct windrow_sample_entry *windrow_sample_find(const struct windrow_sample *sample, uint64_t group, uint64_t identity);
/* The thing was met in a place (1, 2, …; the things of a place come one after another). */
void windrow_sample_mark(struct windrow_sample_entry *entry, enum windrow_sample_aspect aspect, uint32_t place);

/* Adds what another sample kept, from other places. */
void windrow_sample_join(struct windrow_sample *into, const struct windrow_sample *from);

/* How many entries have an aspect, scaled up to all things met. */
double windrow_sample_count(const struct windrow_sample *sample, enum windrow_sample_aspect aspect);

/* How many things with an aspect there are in the whole, of which `place_count` places were read, `share` of it.
 *
 * share 1: the count, within three standard errors of the hash sampling.
 * Else, from f1 (f2) things met in exactly one (two) of m places, D in all:
 *   high   D + f1 (1 − share)/share: every further place brings as many new things as the places read brought on average. New
 *          things become fewer as reading goes on, so in expectation there are no more.
 *   low    D + f1² / (2 f2 m/(m−1) + f1 share/(1−share)), the lower bound of Chao & Lin 2012 ("Nonparametric lower bounds for
 *          species richness and shared species richness under sampling without replacement") for incidences.
 *          In both, f1 is moved by two standard errors, worked out from how unevenly those things lie over the places (a
 *          single page may name a thousand hosts), and in low f2 + 1 likewise.
 *   point  the growth exponent a (distinct ~ read^a) between a quarter, a half and all of the places, their
 *          distinct numbers being known from the incidences; 1 − a is carried on as a power of what is read, up to the
 *          whole; kept within low and high.
 * The bounds are for places chosen at random.
 */
enum windrow_status windrow_sample_estimate(const struct windrow_sample *sample, enum windrow_sample_aspect aspect, uint32_t place_count,
                                            double share, struct windrow_interval *interval);

#endif
