#include "memory_web.h"

#include <stdlib.h>
#include <string.h>

#include "memory.h"

static uint64_t host_first_core(const void *context, uint64_t host)
{
    const struct memory_web *web = context;
    return web->host_firsts[host];
}

static const struct windrow_block_record *record(const void *context, enum windrow_block_kind kind, uint64_t block)
{
    const struct memory_web *web = context;
    return &web->records[kind][block];
}

static enum windrow_status read_block(const void *context, enum windrow_block_kind kind, uint64_t block,
                                      struct windrow_block_reader *reader, struct windrow_block *out)
{
    (void)reader;
    const struct memory_web *web = context;
    return windrow_block_parse(web->payloads[kind][block].data, web->payloads[kind][block].bytes, &web->records[kind][block], out);
}

/* The in-links of the pages of one kind, by target number. */
struct in_links {
    uint32_t target_count;
    uint64_t *firsts;
    uint64_t *sources;
};

static int by_value(const void *left, const void *right)
{
    uint64_t a = *(const uint64_t *)left, b = *(const uint64_t *)right;
    return a < b ? -1 : a > b;
}

static struct in_links collect(const struct memory_web *web, const struct graph *graph, enum windrow_block_kind kind)
{
    struct in_links links = {.target_count = (uint32_t)(kind == WINDROW_BLOCK_CORE ? web->web.core_pages : web->web.pages - web->web.core_pages)};
    links.firsts = memory_array((size_t)links.target_count + 2, 8);
    links.sources = memory_array(graph->link_count, 8);
    for (int fill = 0; fill < 2; fill++) {
        for (size_t i = 0; i < graph->link_count; i++) {
            uint32_t target = graph->links[i].target;
            if ((web->out_degrees[target] > 0) != (kind == WINDROW_BLOCK_CORE))
                continue;
            uint64_t number = web->number[target];
            if (fill)
                links.sources[links.firsts[number + 1]++] = web->number[graph->links[i].source];
            else
                links.firsts[number + 2]++;
        }
        for (uint32_t t = 0; !fill && t <= links.target_count; t++)
            links.firsts[t + 1] += links.firsts[t];
    }
    for (uint32_t t = 0; t < links.target_count; t++)
        qsort(links.sources + links.firsts[t], links.firsts[t + 1] - links.firsts[t], 8, by_value);
    return links;
}

static void add_block(struct memory_web *web, const struct in_links *links, enum windrow_block_kind kind, uint32_t first, uint32_t count,
                      uint64_t from, uint64_t to, uint32_t flags)
{
    uint64_t block = web->web.block_count[kind]++;
    web->records[kind] = memory_resize(web->records[kind], block + 1, sizeof **web->records);
    web->payloads[kind] = memory_resize(web->payloads[kind], block + 1, sizeof **web->payloads);
    uint32_t *counts = memory_array(count, 4);
    uint64_t *near_first = memory_array(count, 8), *near_end = memory_array(count, 8), host = 0;
    for (uint32_t t = 0; t < count; t++) {
        counts[t] = flags ? (uint32_t)(to - from) : (uint32_t)(links->firsts[first + t + 1] - links->firsts[first + t]);
        while (web->host_firsts[host + 1] <= first + t && host + 1 < web->web.host_count)
            host++;
        near_first[t] = web->host_firsts[host] > first ? web->host_firsts[host] : first;
        near_end[t] = web->host_firsts[host + 1] < first + count ? web->host_firsts[host + 1] : first + count;
    }
    struct windrow_block_input input = {.kind = kind, .first_target = first, .target_count = count, .flags = flags,
                                        .sources = links->sources + from, .counts = counts, .near_first = near_first, .near_end = near_end};
    web->payloads[kind][block] = (struct windrow_buffer){0};
    if (windrow_block_encode(&input, &web->payloads[kind][block]))
        abort();
    web->records[kind][block] = (struct windrow_block_record){.first_target = first, .link_count = to - from, .target_count = count,
                                                              .payload_bytes = (uint32_t)web->payloads[kind][block].bytes, .flags = flags};
    web->web.links[kind] += to - from;
    free(counts);
    free(near_first);
    free(near_end);
}

static void add_blocks(struct memory_web *web, const struct graph *graph, enum windrow_block_kind kind, uint32_t block_links)
{
    struct in_links links = collect(web, graph, kind);
    for (uint32_t t = 0; t < links.target_count;) {
        uint64_t from = links.firsts[t], end = links.firsts[t + 1];
        uint32_t first = t++;
        if (end - from > block_links) {
            for (; from < end; from += block_links) {
                bool last = end - from <= block_links;
                add_block(web, &links, kind, first, 1, from, last ? end : from + block_links,
                          WINDROW_BLOCK_PIECE | (last ? WINDROW_BLOCK_LAST_PIECE : 0));
            }
            continue;
        }
        while (t < links.target_count && links.firsts[t] - from < block_links && links.firsts[t + 1] - links.firsts[t] <= block_links)
            t++;
        add_block(web, &links, kind, first, t - first, from, links.firsts[t], 0);
    }
    free(links.firsts);
    free(links.sources);
}

static void number_pages(struct memory_web *web, const struct graph *graph, const uint32_t *host_of)
{
    uint64_t core = 0, rim = 0, host_count = graph->page_count ? (host_of ? host_of[graph->page_count - 1] + 1 : 1) : 0;
    web->number = memory_array(graph->page_count, 8);
    web->host_firsts = memory_array(host_count + 1, 8);
    web->degrees = memory_array(graph->page_count, 4);
    for (uint32_t page = 0; page < graph->page_count; page++) {
        if (page == 0 || (host_of && host_of[page] != host_of[page - 1]))
            web->host_firsts[host_of ? host_of[page] : 0] = core;
        if (web->out_degrees[page])
            web->degrees[core] = web->out_degrees[page];
        web->number[page] = web->out_degrees[page] ? core++ : rim++;
    }
    web->host_firsts[host_count] = core;
    web->web.pages = graph->page_count;
    web->web.core_pages = core;
    web->web.host_count = host_count;
}

struct memory_web *memory_web_make(const struct graph *graph, uint32_t block_links, const uint32_t *host_of)
{
    struct memory_web *web = memory_array(1, sizeof *web);
    web->out_degrees = graph_out_degrees(graph);
    number_pages(web, graph, host_of);
    web->inside_degrees = memory_array(web->web.core_pages, 4);
    for (size_t i = 0; i < graph->link_count; i++) {
        uint32_t source = graph->links[i].source, target = graph->links[i].target;
        web->inside_degrees[web->number[source]] += web->out_degrees[target] > 0 && (!host_of || host_of[source] == host_of[target]);
    }
    web->web.degrees = web->degrees;
    web->web.inside_degrees = web->inside_degrees;
    web->web.context = web;
    web->web.host_first_core = host_first_core;
    web->web.record = record;
    web->web.read = read_block;
    add_blocks(web, graph, WINDROW_BLOCK_CORE, block_links);
    add_blocks(web, graph, WINDROW_BLOCK_RIM, block_links);
    return web;
}

void memory_web_free(struct memory_web *web)
{
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++) {
        for (uint64_t block = 0; block < web->web.block_count[kind]; block++)
            windrow_buffer_free(&web->payloads[kind][block]);
        free(web->records[kind]);
        free(web->payloads[kind]);
    }
    free(web->number);
    free(web->out_degrees);
    free(web->host_firsts);
    free(web->degrees);
    free(web->inside_degrees);
    free(web);
}
