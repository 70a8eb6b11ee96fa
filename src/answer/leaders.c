/* Why ranges need so little: a page that is certainly above a leader has a higher score, so it is a leader
 * itself. Only the other end of a range is open to pages outside the leaders; of these, one that might
 * overtake a leader might overtake every leader below that one too. So it is counted once, at the highest
 * leader that it might overtake, and sums along the leaders give each one's number. */
#include "answer/leaders.h"

#include <stdlib.h>

struct leader_bounds {
    double low;
    double high;
    uint64_t overtakers; /* pages outside the leaders for which this is the highest leader in reach */
};

static bool is_worse(const struct windrow_leader *a, const struct windrow_leader *b)
{
    return a->score != b->score ? a->score < b->score : a->page > b->page;
}

/* The heap has its worst leader on top. */
static void sift_down(struct windrow_leader *heap, uint64_t count, uint64_t at, struct windrow_leader moving)
{
    for (;;) {
        uint64_t child = 2 * at + 1;
        if (child >= count)
            break;
        if (child + 1 < count && is_worse(&heap[child + 1], &heap[child]))
            child++;
        if (is_worse(&moving, &heap[child]))
            break;
        heap[at] = heap[child];
        at = child;
    }
    heap[at] = moving;
}

static int compare(const void *left, const void *right)
{
    const struct windrow_leader *a = left, *b = right;
    return is_worse(b, a) ? -1 : is_worse(a, b);
}

static enum windrow_status gather(const double *scores, const struct windrow_span *spans, size_t span_count, uint64_t most,
                                  struct windrow_leaders *leaders)
{
    leaders->leader_room.bytes = 0;
    leaders->count = 0;
    bool is_heap = false;
    for (size_t s = 0; s < span_count && most; s++)
        for (uint64_t page = spans[s].first; page < spans[s].end; page++) {
            struct windrow_leader leader = {.page = page, .score = scores[page]};
            if (leaders->count < most) {
                enum windrow_status status = windrow_buffer_append(&leaders->leader_room, &leader, sizeof leader);
                if (status)
                    return status;
                leaders->leaders = (struct windrow_leader *)leaders->leader_room.data;
                leaders->count++;
                continue;
            }
            if (!is_heap) {
                for (uint64_t at = most / 2; at-- > 0;)
                    sift_down(leaders->leaders, most, at, leaders->leaders[at]);
                is_heap = true;
            }
            if (leader.score > leaders->leaders[0].score) /* an equal one comes later and stays outside */
                sift_down(leaders->leaders, most, 0, leader);
        }
    if (leaders->count)
        qsort(leaders->leaders, leaders->count, sizeof *leaders->leaders, compare);
    return WINDROW_OK;
}

/* The first leader whose low end a page with this high end reaches; all behind it are reached too. */
static uint64_t first_in_reach(const struct leader_bounds *ends, uint64_t count, double high)
{
    uint64_t first = 0, end = count;
    while (first < end) {
        uint64_t middle = first + (end - first) / 2;
        if (high >= ends[middle].low)
            end = middle;
        else
            first = middle + 1;
    }
    return first;
}

static void count_overtakers(const double *scores, const struct windrow_span *spans, size_t span_count,
                             const struct windrow_bounds *bounds, const struct windrow_leaders *leaders, struct leader_bounds *ends)
{
    const struct windrow_leader *last = &leaders->leaders[leaders->count - 1];
    double known_score = -1, harmless = -1; /* harmless: the highest score known to reach nobody */
    uint64_t known_leader = 0;
    for (size_t s = 0; s < span_count; s++)
        for (uint64_t page = spans[s].first; page < spans[s].end; page++) {
            double score = scores[page];
            if (score <= harmless || score > last->score || (score == last->score && page <= last->page))
                continue;
            if (score != known_score) {
                double low, high;
                bounds->interval(bounds->certificate, score, &low, &high);
                uint64_t leader = first_in_reach(ends, leaders->count, high);
                if (leader == leaders->count) {
                    harmless = score;
                    continue;
                }
                known_score = score;
                known_leader = leader;
            }
            ends[known_leader].overtakers++;
        }
}

enum windrow_status windrow_leaders_find(const double *scores, const struct windrow_span *spans, size_t span_count, uint64_t most,
                                         const struct windrow_bounds *bounds, struct windrow_leaders *leaders)
{
    enum windrow_status status = gather(scores, spans, span_count, most, leaders);
    if (status || !leaders->count)
        return status;
    leaders->bounds_room.bytes = 0;
    if ((status = windrow_buffer_reserve(&leaders->bounds_room, leaders->count * sizeof(struct leader_bounds))))
        return status;
    struct leader_bounds *ends = (struct leader_bounds *)leaders->bounds_room.data;
    for (uint64_t i = 0; i < leaders->count; i++) {
        ends[i].overtakers = 0;
        bounds->interval(bounds->certificate, leaders->leaders[i].score, &ends[i].low, &ends[i].high);
    }
    uint64_t group_pages = 0;
    for (size_t s = 0; s < span_count; s++)
        group_pages += spans[s].end - spans[s].first;
    if (group_pages > leaders->count)
        count_overtakers(scores, spans, span_count, bounds, leaders, ends);
    uint64_t above = 0, reaching = 0, overtakers = 0;
    for (uint64_t i = 0; i < leaders->count; i++) {
        while (above < i && ends[above].low > ends[i].high)
            above++;
        while (reaching < leaders->count && ends[reaching].high >= ends[i].low)
            reaching++;
        overtakers += ends[i].overtakers;
        leaders->leaders[i].range = (struct windrow_range){.first = above + 1, .last = reaching + overtakers};
    }
    return WINDROW_OK;
}

void windrow_leaders_free(struct windrow_leaders *leaders)
{
    windrow_buffer_free(&leaders->leader_room);
    windrow_buffer_free(&leaders->bounds_room);
    *leaders = (struct windrow_leaders){0};
}
