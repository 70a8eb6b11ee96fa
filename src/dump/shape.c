#include "dump/shape.h"

#include <stdint.h>
#include <string.h>
#include <strings.h>

static bool is_blank(char byte)
{
    return byte == ' ' || (byte >= '\t' && byte <= '\r');
}

static bool token_is(const char *token, size_t bytes, const char *name)
{
    return strlen(name) == bytes && strncasecmp(token, name, bytes) == 0;
}

static bool token_read(const char *token, size_t bytes, bool *nofollow)
{
    static const char *const distrusting[] = {"nofollow", "ugc", "sponsored"};
    static const char *const others[] = {"alternate",  "author", "bookmark",       "external", "help",   "license",
                                         "me",         "next",   "noopener",       "noreferrer", "opener", "prev",
                                         "privacy-policy", "search", "tag",        "terms-of-service"};
    for (size_t i = 0; i < sizeof distrusting / sizeof *distrusting; i++) {
        if (token_is(token, bytes, distrusting[i])) {
            *nofollow = true;
            return true;
        }
    }
    for (size_t i = 0; i < sizeof others / sizeof *others; i++)
        if (token_is(token, bytes, others[i]))
            return true;
    return false;
}

bool windrow_dump_rel_read(const char *field, size_t bytes, bool *nofollow)
{
    *nofollow = false;
    for (size_t at = 0; at < bytes;) {
        if (is_blank(field[at]) || field[at] == ',') {
            at++;
            continue;
        }
        size_t start = at;
        while (at < bytes && !is_blank(field[at]) && field[at] != ',')
            at++;
        if (!token_read(field + start, at - start, nofollow))
            return false;
    }
    return true;
}

/* Whole numbers, with white space around and between them. */
static bool field_numeric(const char *field, size_t bytes)
{
    bool digits = false;
    for (size_t i = 0; i < bytes; i++) {
        if (is_blank(field[i]))
            continue;
        if (field[i] < '0' || field[i] > '9')
            return false;
        digits = true;
    }
    return digits;
}

/* What the lines say. */
struct votes {
    uint64_t lines, numeric, pairs, lists;
};

static void line_count(const char *line, size_t bytes, struct votes *votes)
{
    while (bytes > 0 && is_blank(line[bytes - 1]))
        bytes--;
    if (bytes == 0)
        return;
    bool numeric = true, rel = false;
    size_t fields = 0;
    for (const char *field = line, *end = line + bytes; field != NULL && fields < 4; fields++) {
        const char *tab = memchr(field, '\t', (size_t)(end - field));
        size_t field_bytes = (size_t)((tab != NULL ? tab : end) - field);
        bool nofollow;
        numeric = numeric && field_numeric(field, field_bytes);
        if (fields == 2)
            rel = windrow_dump_rel_read(field, field_bytes, &nofollow);
        field = tab != NULL ? tab + 1 : NULL;
    }
    votes->lines++;
    votes->numeric += numeric;
    votes->pairs += fields == 3 && rel;
    votes->lists += fields > 3 || (fields == 3 && !rel);
}

enum windrow_dump_shape windrow_dump_shape_recognise(const char *sample, size_t bytes, bool whole)
{
    struct votes votes = {0};
    const char *line = sample, *end = sample + bytes;
    for (uint64_t seen = 0; line < end && seen < WINDROW_DUMP_SAMPLE_LINES; seen++) {
        const char *newline = memchr(line, '\n', (size_t)(end - line));
        const char *stop = newline != NULL ? newline : end;
        if (newline == NULL && !whole) {
            /* The last field of a line that is cut short means nothing yet. */
            const char *tab = memrchr(line, '\t', (size_t)(end - line));
            if (tab == NULL)
                break;
            stop = tab;
        }
        line_count(line, (size_t)(stop - line), &votes);
        line = stop + 1;
        if (newline == NULL)
            break;
    }
    if (votes.lines > 0 && votes.numeric == votes.lines)
        return WINDROW_DUMP_IDS;
    return votes.lists > votes.pairs ? WINDROW_DUMP_LISTS : WINDROW_DUMP_PAIRS;
}
