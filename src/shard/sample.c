#include "shard/sample.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

enum { LEAST = 16, PLACES_MOST = 255 };

/* What was not met at all may still be met this often, with 95 % certainty: the rule of three (Hanley & Lippman-Hand 1983). */
#define NEVER_SEEN 3.0

static uint32_t slot_count(uint32_t most)
{
    uint32_t slots = 2 * LEAST;
    while (slots < (uint64_t)most * 2 && slots < UINT32_C(1) << 31)
        slots *= 2;
    return slots;
}

uint64_t windrow_sample_bytes(uint32_t most)
{
    return (uint64_t)most * sizeof(struct windrow_sample_entry) + (uint64_t)slot_count(most) * sizeof(uint32_t);
}

enum windrow_status windrow_sample_create(struct windrow_sample *sample, uint32_t most)
{
    *sample = (struct windrow_sample){.most = most < LEAST ? LEAST : most};
    sample->slot_mask = slot_count(sample->most) - 1;
    sample->entries = malloc(sample->most * sizeof *sample->entries);
    sample->slots = calloc((size_t)sample->slot_mask + 1, sizeof *sample->slots);
    if (sample->entries && sample->slots)
        return WINDROW_OK;
    windrow_sample_free(sample);
    return windrow_fail(WINDROW_RESOURCE, "out of memory for a sample; try a smaller --memory");
}

void windrow_sample_free(struct windrow_sample *sample)
{
    free(sample->entries);
    free(sample->slots);
    *sample = (struct windrow_sample){0};
}

static bool takes(const struct windrow_sample *sample, uint64_t group)
{
    return sample->halvings == 0 || group >> (64 - sample->halvings) == 0;
}

/* The slot that holds the identity, or the free one where it belongs. */
static uint32_t slot_of(const struct windrow_sample *sample, uint64_t identity)
{
    uint32_t slot = (uint32_t)identity & sample->slot_mask;
    while (sample->slots[slot] && sample->entries[sample->slots[slot] - 1].identity != identity)
        slot = (slot + 1) & sample->slot_mask;
    return slot;
}

static void halve(struct windrow_sample *sample)
{
    uint32_t kept = 0;
    sample->halvings++;
    memset(sample->slots, 0, ((size_t)sample->slot_mask + 1) * sizeof *sample->slots);
    for (uint32_t index = 0; index < sample->count; index++)
        if (takes(sample, sample->entries[index].group)) {
            sample->entries[kept] = sample->entries[index];
            sample->slots[slot_of(sample, sample->entries[kept].identity)] = kept + 1;
            kept++;
        }
    sample->count = kept;
}

struct windrow_sample_entry *windrow_sample_meet(struct windrow_sample *sample, uint64_t group, uint64_t identity)
{
    if (!takes(sample, group))
        return NULL;
    uint32_t slot = slot_of(sample, identity);
    if (sample->slots[slot])
        return &sample->entries[sample->slots[slot] - 1];
    while (sample->count == sample->most) {
        if (sample->halvings == 63) /* only hashes made for the purpose come here */
            return NULL;
        halve(sample);
        if (!takes(sample, group))
            return NULL;
        slot = slot_of(sample, identity);
    }
    struct windrow_sample_entry *entry = &sample->entries[sample->count++];
    *entry = (struct windrow_sample_entry){.group = group, .identity = identity};
    sample->slots[slot] = sample->count;
    return entry;
}

const struct windrow_sample_entry *windrow_sample_find(const struct windrow_sample *sample, uint64_t group, uint64_t identity)
{
    if (!takes(sample, group))
        return NULL;
    uint32_t slot = sample->slots[slot_of(sample, identity)];
    return slot ? &sample->entries[slot - 1] : NULL;
}

static void add_places(struct windrow_sample_entry *entry, enum windrow_sample_aspect aspect, unsigned places)
{
    unsigned sum = entry->places[aspect] + places;
    entry->places[aspect] = sum < PLACES_MOST ? (uint8_t)sum : PLACES_MOST;
}

void windrow_sample_mark(struct windrow_sample_entry *entry, enum windrow_sample_aspect aspect, uint32_t place)
{
    if (entry->last_place[aspect] == place)
        return;
    entry->last_place[aspect] = place;
    add_places(entry, aspect, 1);
}

void windrow_sample_join(struct windrow_sample *into, const struct windrow_sample *from)
{
    while (into->halvings < from->halvings)
        halve(into);
    for (uint32_t index = 0; index < from->count; index++) {
        const struct windrow_sample_entry *theirs = &from->entries[index];
        struct windrow_sample_entry *ours = windrow_sample_meet(into, theirs->group, theirs->identity);
        if (!ours)
            continue;
        memcpy(ours->note, theirs->note, sizeof ours->note);
        for (int aspect = 0; aspect < WINDROW_SAMPLE_ASPECTS; aspect++) {
            add_places(ours, aspect, theirs->places[aspect]);
            if (theirs->places[aspect])
                ours->last_place[aspect] = theirs->last_place[aspect];
        }
    }
}

/* Entries with the aspect in all, in exactly one and in exactly two places; and how many of them a half and a quarter of the
 * places would have shown on average. */
struct incidences {
    double all, once, twice, in_half, in_quarter;
};

static struct incidences count_incidences(const struct windrow_sample *sample, enum windrow_sample_aspect aspect)
{
    struct incidences counts = {0};
    uint64_t with[PLACES_MOST + 1] = {0};
    for (uint32_t index = 0; index < sample->count; index++)
        with[sample->entries[index].places[aspect]]++;
    for (int places = 1; places <= PLACES_MOST; places++) {
        double entries = (double)with[places];
        counts.all += entries;
        counts.in_half += entries * (1 - pow(0.5, places));
        counts.in_quarter += entries * (1 - pow(0.75, places));
    }
    counts.once = (double)with[1];
    counts.twice = (double)with[2];
    return counts;
}

double windrow_sample_count(const struct windrow_sample *sample, enum windrow_sample_aspect aspect)
{
    return ldexp(count_incidences(sample, aspect).all, (int)sample->halvings);
}

static double growth(const struct incidences *counts, double share)
{
    double lack = 1 - log2(counts->all / counts->in_half);                /* of the exponent, to 1 */
    double lack_before = 1 - log2(counts->in_half / counts->in_quarter);
    double factor = lack > 0 && lack_before > 0 ? lack / lack_before : 1; /* a doubling */
    factor = factor < 1 ? 1 : factor > 2 ? 2 : factor;
    double sum = 0;
    for (double left = -log2(share); left > 0; left--) {
        lack = fmin(lack * factor, 1);
        sum += fmin(left, 1) * (1 - lack);
    }
    return exp2(sum);
}

/* The standard error of the number of things met in one place only, from how they lie over the places. */
static enum windrow_status once_error(const struct windrow_sample *sample, enum windrow_sample_aspect aspect, uint32_t place_count, double *error)
{
    double mean = 0, squares = 0;
    uint32_t *once_in = calloc((size_t)place_count + 1, sizeof *once_in);
    if (!once_in)
        return windrow_fail(WINDROW_RESOURCE, "out of memory for an estimate");
    for (uint32_t index = 0; index < sample->count; index++) {
        const struct windrow_sample_entry *entry = &sample->entries[index];
        if (entry->places[aspect] == 1 && entry->last_place[aspect] <= place_count)
            once_in[entry->last_place[aspect]]++;
    }
    for (uint32_t place = 1; place <= place_count; place++)
        mean += (double)once_in[place] / place_count;
    for (uint32_t place = 1; place <= place_count; place++)
        squares += ((double)once_in[place] - mean) * ((double)once_in[place] - mean);
    free(once_in);
    *error = sqrt(squares * place_count / fmax(place_count - 1.0, 1));
    return WINDROW_OK;
}

enum windrow_status windrow_sample_estimate(const struct windrow_sample *sample, enum windrow_sample_aspect aspect, uint32_t place_count,
                                            double share, struct windrow_interval *interval)
{
    struct incidences counts = count_incidences(sample, aspect);
    double scale = ldexp(1, (int)sample->halvings), spread = 3 * sqrt(counts.all * (1 - 1 / scale)), error = 0;
    *interval = (struct windrow_interval){0};
    if (counts.all == 0)
        return WINDROW_OK;
    if (share >= 1) {
        *interval = (struct windrow_interval){fmax(counts.all - spread, 0) * scale, counts.all * scale, (counts.all + spread) * scale};
        return WINDROW_OK;
    }
    enum windrow_status status = once_error(sample, aspect, place_count, &error);
    if (status)
        return status;
    double places = fmax(place_count, 2), odds = share / (1 - share);
    double high = counts.all + fmax(counts.once + 2 * error, NEVER_SEEN) / odds, low = counts.all;
    double once = fmax(counts.once - 2 * error, 0), twice = counts.twice + 1 + 2 * sqrt(counts.twice + 1);
    low += once * once / (2 * twice * places / (places - 1) + counts.once * odds);
    double point = fmin(fmax(counts.all * growth(&counts, share), low), counts.all + counts.once / odds);
    double unsure = 1 + spread / counts.all;
    *interval = (struct windrow_interval){low / unsure * scale, point * scale, high * unsure * scale};
    return WINDROW_OK;
}
