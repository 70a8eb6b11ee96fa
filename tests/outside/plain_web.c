#include "plain_web.h"

#include <stdbool.h>
#include <stdlib.h>
#include <string.h>

#include "../common/memory.h"

/* A line of the dump; the URLs are in normal form, or NULL. */
struct line {
    char *source, *target;
    bool nofollow;
};

struct lines {
    struct line *lines;
    size_t count, capacity;
};

static void add_line(struct lines *lines, struct line line)
{
    if (lines->count == lines->capacity) {
        lines->capacity = lines->capacity * 2 + 1024;
        lines->lines = memory_resize(lines->lines, lines->capacity, sizeof *lines->lines);
    }
    lines->lines[lines->count++] = line;
}

static void read_line(struct plain_web *web, struct lines *lines, char *text, bool keep_nofollow)
{
    struct line line = {0};
    char *source = strsep(&text, "\t");
    char *target = text != NULL ? strsep(&text, "\t") : NULL;
    web->line_count++;
    line.nofollow = text != NULL && !keep_nofollow; /* in a dump of pairs, the third field holds such tokens only */
    if (plain_url(source, &line.source) != PLAIN_KEPT) {
        web->malformed++;
        return;
    }
    if (target != NULL) {
        enum plain_form form = plain_url(target, &line.target);
        web->malformed += form == PLAIN_MALFORMED;
        web->scheme += form == PLAIN_SCHEME;
    }
    add_line(lines, line);
}

static int url_order(const void *left, const void *right)
{
    return strcmp(*(char *const *)left, *(char *const *)right);
}

uint32_t plain_web_find(const struct plain_web *web, const char *url)
{
    char *const *found = bsearch(&url, web->urls, web->graph.page_count, sizeof *web->urls, url_order);
    return found != NULL ? (uint32_t)(found - web->urls) : web->graph.page_count;
}

/* Every source, and every target of a line that may be followed, is a page. */
static void name_pages(struct plain_web *web, const struct lines *lines)
{
    size_t count = 0, kept = 0;
    web->urls = memory_array(2 * lines->count, sizeof *web->urls);
    for (size_t i = 0; i < lines->count; i++) {
        const struct line *line = &lines->lines[i];
        web->urls[count++] = line->source;
        if (line->target != NULL && !line->nofollow)
            web->urls[count++] = line->target;
    }
    qsort(web->urls, count, sizeof *web->urls, url_order);
    for (size_t i = 0; i < count; i++)
        if (kept == 0 || strcmp(web->urls[i], web->urls[kept - 1]) != 0)
            web->urls[kept++] = web->urls[i];
    for (size_t i = 0; i < kept; i++)
        web->urls[i] = memory_text("%s", web->urls[i]);
    web->graph = graph_make((uint32_t)kept);
}

struct plain_web plain_web_read(char *text, bool keep_nofollow)
{
    struct plain_web web = {0};
    struct lines lines = {0};
    while (text != NULL && *text != '\0')
        read_line(&web, &lines, strsep(&text, "\n"), keep_nofollow);
    name_pages(&web, &lines);
    bool *crawled = memory_array(web.graph.page_count, sizeof *crawled);
    for (size_t i = 0; i < lines.count; i++) {
        struct line *line = &lines.lines[i];
        uint32_t source = plain_web_find(&web, line->source);
        web.crawled_pages += !crawled[source];
        crawled[source] = true;
        if (line->target != NULL && line->nofollow)
            web.nofollow++;
        else if (line->target != NULL && strcmp(line->source, line->target) == 0)
            web.self++;
        else if (line->target != NULL)
            graph_link(&web.graph, source, plain_web_find(&web, line->target));
    }
    web.duplicate = web.graph.link_count;
    graph_tidy(&web.graph);
    web.duplicate -= web.graph.link_count;
    for (size_t i = 0; i < lines.count; i++) {
        free(lines.lines[i].source);
        free(lines.lines[i].target);
    }
    free(lines.lines);
    free(crawled);
    return web;
}

void plain_web_free(struct plain_web *web)
{
    for (uint32_t page = 0; page < web->graph.page_count; page++)
        free(web->urls[page]);
    free(web->urls);
    graph_free(&web->graph);
    *web = (struct plain_web){0};
}
