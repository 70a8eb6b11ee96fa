/* plain_web: a dump of pairs read a second time, plainly: the normal form and the link rules written
 * again from the RFC with no thought of speed, so that what the program keeps of a real web can be
 * counted and ranked without it. Knows ASCII hosts only (no IDN) and needs the dump in memory.
 */
#ifndef TESTS_OUTSIDE_PLAIN_WEB_H
#define TESTS_OUTSIDE_PLAIN_WEB_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "../common/graph.h"

enum plain_form {
    PLAIN_KEPT,
    PLAIN_MALFORMED,
    PLAIN_SCHEME /* well formed, but neither http nor https */
};

/* The normal form of a URL (RFC 3986 sections 6.2.2 and 6.2.3 with the choices of the README), to be
 * freed; NULL when it is not kept. */
enum plain_form plain_url(const char *url, char **normal);

struct plain_web {
    struct graph graph; /* tidy */
    char **urls;        /* normal form of each page, sorted bytewise: page ids are positions here */
    uint64_t line_count;
    uint64_t malformed, scheme, nofollow, self, duplicate; /* dropped links by the first reason that fits */
    uint64_t crawled_pages;
};

/* Reads a dump from memory; `text` is torn to pieces on the way. `keep_nofollow` as the program's
 * --nofollow keep. */
struct plain_web plain_web_read(char *text, bool keep_nofollow);
void plain_web_free(struct plain_web *web);

/* The page's id, or page_count when there is no such page. */
uint32_t plain_web_find(const struct plain_web *web, const char *url);

#endif
