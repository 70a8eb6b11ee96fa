#include "graph.h"

#include <stdlib.h>
#include <string.h>

#include "memory.h"

uint64_t dice_next(struct dice *dice)
{
    uint64_t mixed = (dice->state += 0x9e3779b97f4a7c15u);
    mixed = (mixed ^ (mixed >> 30)) * 0xbf58476d1ce4e5b9u;
    mixed = (mixed ^ (mixed >> 27)) * 0x94d049bb133111ebu;
    return mixed ^ (mixed >> 31);
}

uint32_t dice_below(struct dice *dice, uint32_t bound)
{
    return (uint32_t)(((dice_next(dice) >> 32) * bound) >> 32);
}

struct graph graph_make(uint32_t page_count)
{
    return (struct graph){.page_count = page_count};
}

struct graph graph_copy(const struct graph *graph)
{
    struct graph copy = *graph;
    copy.link_capacity = graph->link_count;
    copy.links = memory_array(graph->link_count, sizeof *copy.links);
    if (graph->link_count > 0)
        memcpy(copy.links, graph->links, graph->link_count * sizeof *copy.links);
    return copy;
}

void graph_free(struct graph *graph)
{
    free(graph->links);
    *graph = (struct graph){0};
}

void graph_link(struct graph *graph, uint32_t source, uint32_t target)
{
    if (source >= graph->page_count || target >= graph->page_count)
        abort();
    if (graph->link_count == graph->link_capacity) {
        graph->link_capacity = graph->link_capacity * 2 + 16;
        graph->links = memory_resize(graph->links, graph->link_capacity, sizeof *graph->links);
    }
    graph->links[graph->link_count++] = (struct link){source, target};
}

void graph_link_pairs(struct graph *graph, const uint32_t *numbers, size_t number_count)
{
    for (size_t i = 0; i + 1 < number_count; i += 2)
        graph_link(graph, numbers[i], numbers[i + 1]);
}

static int link_order(const void *left, const void *right)
{
    const struct link *a = left, *b = right;
    if (a->source != b->source)
        return a->source < b->source ? -1 : 1;
    return a->target < b->target ? -1 : a->target > b->target;
}

void graph_tidy(struct graph *graph)
{
    if (graph->link_count == 0)
        return;
    qsort(graph->links, graph->link_count, sizeof *graph->links, link_order);
    size_t kept = 0;
    for (size_t i = 0; i < graph->link_count; i++) {
        const struct link *link = &graph->links[i];
        if (link->source == link->target)
            continue;
        if (kept > 0 && link_order(link, &graph->links[kept - 1]) == 0)
            continue;
        graph->links[kept++] = *link;
    }
    graph->link_count = kept;
}

static uint32_t skewed_page(struct dice *dice, uint32_t page_count)
{
    uint32_t bound = page_count;
    while (bound > 1 && dice_below(dice, 3) > 0)
        bound = (bound + 1) / 2;
    return dice_below(dice, bound);
}

static uint32_t random_target(struct dice *dice, enum graph_kind kind, uint32_t page_count, uint32_t source)
{
    uint32_t group = source - source % 8;
    uint32_t group_pages = page_count - group < 8 ? page_count - group : 8;
    switch (kind) {
    case GRAPH_SKEWED:
        return skewed_page(dice, page_count);
    case GRAPH_NESTED:
        return dice_below(dice, 40) == 0 ? dice_below(dice, page_count) : group + dice_below(dice, group_pages);
    case GRAPH_LONG:
        return dice_below(dice, 10) == 0 ? dice_below(dice, page_count) : (source + 1) % page_count;
    default:
        return dice_below(dice, page_count);
    }
}

struct graph graph_random(struct dice *dice, enum graph_kind kind, uint32_t page_count, uint32_t links_per_page)
{
    static const uint32_t dangling_percent[GRAPH_KINDS] = {20, 50, 3, 0, 10};
    struct graph graph = graph_make(page_count);
    for (uint32_t source = 0; source < page_count; source++) {
        if (dice_below(dice, 100) < dangling_percent[kind])
            continue;
        uint32_t links = kind == GRAPH_SPARSE ? 1 : 1 + dice_below(dice, 2 * links_per_page);
        for (uint32_t i = 0; i < links; i++)
            graph_link(&graph, source, random_target(dice, kind, page_count, source));
    }
    if (kind == GRAPH_LONG && page_count > 3)
        graph_link(&graph, page_count - 1, page_count - 3);
    graph_tidy(&graph);
    return graph;
}

struct graph graph_rename(const struct graph *graph, const uint32_t *renamed)
{
    struct graph result = graph_copy(graph);
    for (size_t i = 0; i < graph->link_count; i++) {
        result.links[i].source = renamed[graph->links[i].source];
        result.links[i].target = renamed[graph->links[i].target];
    }
    graph_tidy(&result);
    return result;
}

uint32_t *graph_out_degrees(const struct graph *graph)
{
    uint32_t *degrees = memory_array(graph->page_count, sizeof *degrees);
    for (size_t i = 0; i < graph->link_count; i++)
        degrees[graph->links[i].source]++;
    return degrees;
}
