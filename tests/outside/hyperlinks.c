/* hyperlinks: the links of a directory of HTML files as a dump of pairs, on standard output.
 *
 *     hyperlinks DIRECTORY HOST
 *
 * Every .html, .htm or .xhtml file below DIRECTORY is a page http://HOST/path; its <a href> are
 * resolved against the page or its <base href>. The host names of other sites are replaced by
 * made-up ones, the same for the same, so that a real web can be ranked without naming anybody;
 * what is odd about a host (spaces, say) stays odd. Nothing is put into normal form and nothing is
 * dropped: that is the ranker's job.
 */
#include <ctype.h>
#include <errno.h>
#include <fts.h>
#include <gumbo.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <strings.h>
#include <sys/stat.h>

#include "../common/memory.h"
#include "reference.h"

/* ---- made-up names for outside hosts, numbered as they come ---- */

static struct {
    char **names;
    size_t count;
} outside;

static size_t outside_number(const char *host)
{
    for (size_t i = 0; i < outside.count; i++)
        if (strcasecmp(outside.names[i], host) == 0)
            return i;
    outside.names = memory_resize(outside.names, outside.count + 1, sizeof *outside.names);
    outside.names[outside.count] = memory_text("%s", host);
    return outside.count++;
}

static void print_host(const char *host)
{
    printf("outside-%zu", outside_number(host) + 1);
    for (const char *byte = host; *byte != '\0'; byte++)
        if (!isalnum((unsigned char)*byte) && strchr(".-_", *byte) == NULL)
            putchar(*byte);
    fputs(".example", stdout);
}

/* Prints an absolute URL, its host renamed unless it is our own. */
static void print_target(const char *url, const char *own_host)
{
    const char *rest = strchr(url, ':');
    bool web = strncasecmp(url, "http:", 5) == 0 || strncasecmp(url, "https:", 6) == 0;
    if (!web || strncmp(rest, "://", 3) != 0) {
        fputs(url, stdout);
        return;
    }
    size_t authority_bytes = strcspn(rest + 3, "/?#");
    char *authority = memory_text("%.*s", (int)authority_bytes, rest + 3);
    char *host = strrchr(authority, '@') != NULL ? strrchr(authority, '@') + 1 : authority;
    char *port = strrchr(host, ':');
    printf("%.*s://", (int)(rest - url), url);
    if (strcmp(host, own_host) == 0) {
        fputs(host, stdout);
    } else if (*host != '\0') {
        if (port != NULL)
            *port = '\0';
        print_host(host);
        if (port != NULL)
            printf(":%s", port + 1);
    }
    fputs(rest + 3 + authority_bytes, stdout);
    free(authority);
}

/* ---- HTML ---- */

/* As the HTML standard has it: outer white space goes, TABs and line ends inside go too. */
static char *clean_reference(const char *value)
{
    char *clean = memory_array(strlen(value) + 1, 1), *end = clean;
    for (value += strspn(value, " \t\n\f\r"); *value != '\0'; value++)
        if (strchr("\t\n\r", *value) == NULL)
            *end++ = *value;
    while (end > clean && strchr(" \f", end[-1]) != NULL)
        *--end = '\0';
    return clean;
}

static const GumboNode *find_base(const GumboNode *node)
{
    if (node->type != GUMBO_NODE_ELEMENT)
        return NULL;
    if (node->v.element.tag == GUMBO_TAG_BASE && gumbo_get_attribute(&node->v.element.attributes, "href") != NULL)
        return node;
    const GumboNode *found = NULL;
    for (unsigned i = 0; i < node->v.element.children.length && found == NULL; i++)
        found = find_base(node->v.element.children.data[i]);
    return found;
}

/* The rel tokens that a dump of pairs may carry. */
static void print_rel(const char *rel)
{
    static const char *const tokens[] = {"nofollow", "ugc", "sponsored"};
    char *copy = memory_text("%s", rel), *rest = copy, *token;
    const char *before = "\t";
    while ((token = strsep(&rest, " \t\n\f\r")) != NULL)
        for (size_t i = 0; i < 3; i++)
            if (strcasecmp(token, tokens[i]) == 0) {
                printf("%s%s", before, tokens[i]);
                before = " ";
            }
    free(copy);
}

static size_t print_links(const GumboNode *node, const char *page, const char *base, const char *host)
{
    if (node->type != GUMBO_NODE_ELEMENT)
        return 0;
    size_t printed = 0;
    const GumboElement *element = &node->v.element;
    const GumboAttribute *href = gumbo_get_attribute(&element->attributes, "href");
    if (element->tag == GUMBO_TAG_A && href != NULL) {
        char *reference = clean_reference(href->value);
        char *target = reference_resolve(base, reference);
        const GumboAttribute *rel = gumbo_get_attribute(&element->attributes, "rel");
        printf("%s\t", page);
        print_target(target, host);
        if (rel != NULL)
            print_rel(rel->value);
        putchar('\n');
        free(target);
        free(reference);
        printed++;
    }
    for (unsigned i = 0; i < element->children.length; i++)
        printed += print_links(element->children.data[i], page, base, host);
    return printed;
}

static void print_page(const char *html, size_t html_bytes, const char *page, const char *host)
{
    GumboOutput *parsed = gumbo_parse_with_options(&kGumboDefaultOptions, html, html_bytes);
    const GumboNode *element = find_base(parsed->root);
    char *base = memory_text("%s", page);
    if (element != NULL) {
        char *reference = clean_reference(gumbo_get_attribute(&element->v.element.attributes, "href")->value);
        char *resolved = reference_resolve(page, reference);
        free(reference);
        free(base);
        base = resolved;
    }
    if (print_links(parsed->root, page, base, host) == 0)
        printf("%s\n", page); /* fetched, and without links */
    free(base);
    gumbo_destroy_output(&kGumboDefaultOptions, parsed);
}

/* ---- files ---- */

static char *page_url(const char *host, const char *path)
{
    static const char plain[] = "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789-._~!$&'()*+,;=:@/";
    char *escaped = memory_array(3 * strlen(path) + 1, 1), *end = escaped;
    for (; *path != '\0'; path++)
        end += strchr(plain, *path) != NULL ? sprintf(end, "%c", *path) : sprintf(end, "%%%02X", (unsigned char)*path);
    char *url = memory_text("http://%s%s", host, escaped);
    free(escaped);
    return url;
}

static bool is_html(const char *name)
{
    const char *suffix = strrchr(name, '.');
    return suffix != NULL &&
           (strcasecmp(suffix, ".html") == 0 || strcasecmp(suffix, ".htm") == 0 || strcasecmp(suffix, ".xhtml") == 0);
}

static bool print_file(const FTSENT *entry, size_t root_bytes, const char *host)
{
    FILE *file = fopen(entry->fts_accpath, "rb");
    if (file == NULL) {
        fprintf(stderr, "hyperlinks: %s: %s\n", entry->fts_path, strerror(errno));
        return false;
    }
    size_t html_bytes = (size_t)entry->fts_statp->st_size;
    char *html = memory_array(html_bytes + 1, 1);
    bool whole = fread(html, 1, html_bytes, file) == html_bytes;
    fclose(file);
    char *page = page_url(host, entry->fts_path + root_bytes);
    if (whole)
        print_page(html, html_bytes, page, host);
    else
        fprintf(stderr, "hyperlinks: %s: cannot be read whole\n", entry->fts_path);
    free(page);
    free(html);
    return whole;
}

static int by_name(const FTSENT **left, const FTSENT **right)
{
    return strcmp((*left)->fts_name, (*right)->fts_name);
}

int main(int argument_count, char **arguments)
{
    if (argument_count != 3) {
        fputs("usage: hyperlinks DIRECTORY HOST\n", stderr);
        return 2;
    }
    char *const roots[] = {arguments[1], NULL};
    FTS *tree = fts_open(roots, FTS_PHYSICAL | FTS_NOCHDIR, by_name);
    size_t pages = 0;
    bool good = tree != NULL;
    for (FTSENT *entry; good && (entry = fts_read(tree)) != NULL;)
        if (entry->fts_info == FTS_F && is_html(entry->fts_name)) {
            good = print_file(entry, strlen(arguments[1]), arguments[2]);
            pages++;
        }
    if (tree != NULL)
        fts_close(tree);
    if (good && pages == 0)
        fprintf(stderr, "hyperlinks: no HTML below %s\n", arguments[1]);
    for (size_t i = 0; i < outside.count; i++)
        free(outside.names[i]);
    free(outside.names);
    return good && pages > 0 && fflush(stdout) == 0 ? 0 : 3;
}
