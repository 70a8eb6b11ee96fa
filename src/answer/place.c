#include "answer/place.h"

#include <stdlib.h>
#include <string.h>

enum { MEMORY_BITS = 12 };

/* One score; where two scores meet in an entry, the later one stays. */
struct windrow_place_memory_entry {
    double score;
    uint64_t last_page;   /* the page asked for last */
    uint64_t place;       /* its place; 0: the entry is unused */
    struct windrow_range range;
};

struct limit {
    const struct windrow_bounds *bounds;
    double value;
};

static bool is_certainly_above(const void *context, double score)
{
    const struct limit *limit = context;
    double low, high;
    limit->bounds->interval(limit->bounds->certificate, score, &low, &high);
    return low > limit->value;
}

static bool is_not_certainly_below(const void *context, double score)
{
    const struct limit *limit = context;
    double low, high;
    limit->bounds->interval(limit->bounds->certificate, score, &low, &high);
    return high >= limit->value;
}

struct windrow_range windrow_place_range(const struct windrow_order *order, const struct windrow_bounds *bounds,
                                         double score, uint64_t near_place)
{
    struct limit low = {.bounds = bounds}, high = {.bounds = bounds};
    bounds->interval(bounds->certificate, score, &low.value, &high.value);
    return (struct windrow_range){
        .first = 1 + windrow_order_count(order, is_certainly_above, &high, near_place),
        .last = windrow_order_count(order, is_not_certainly_below, &low, near_place)};
}

static size_t entry_of(double score)
{
    uint64_t bits;
    memcpy(&bits, &score, sizeof bits);
    return (size_t)(bits * UINT64_C(0x9E3779B97F4A7C15) >> (64 - MEMORY_BITS)); /* multiplicative hashing, Knuth */
}

enum windrow_status windrow_place_find(const struct windrow_order *order, const struct windrow_bounds *bounds,
                                       struct windrow_place_memory *memory, double score, uint64_t page,
                                       uint64_t *place, struct windrow_range *range)
{
    if (!memory->entries) {
        memory->entries = calloc((size_t)1 << MEMORY_BITS, sizeof *memory->entries);
        if (!memory->entries)
            return windrow_fail(WINDROW_RESOURCE, "out of memory while looking for places");
    }
    struct windrow_place_memory_entry *entry = &memory->entries[entry_of(score)];
    bool known = entry->place && entry->score == score;
    /* Of equal scores, the next page that has this one usually stands right behind the one before. */
    if (known && page > entry->last_page && entry->place < windrow_order_pages(order) &&
        windrow_order_page(order, entry->place + 1) == page && windrow_order_score(order, entry->place + 1) == score)
        *place = entry->place + 1;
    else
        *place = windrow_order_place(order, score, page);
    if (!*place)
        return windrow_fail(WINDROW_DAMAGED, "the run's order does not hold page %llu with its score: order and scores do not "
                            "belong together; rank again with --fresh", (unsigned long long)page);
    *range = known ? entry->range : windrow_place_range(order, bounds, score, *place);
    *entry = (struct windrow_place_memory_entry){.score = score, .last_page = page, .place = *place, .range = *range};
    return WINDROW_OK;
}

void windrow_place_memory_free(struct windrow_place_memory *memory)
{
    free(memory->entries);
    memory->entries = NULL;
}
