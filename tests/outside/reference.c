#include "reference.h"

#include <stdbool.h>
#include <stdlib.h>
#include <string.h>

#include "../common/memory.h"

/* A component that is not there is NULL: "http://a?" has an empty query, "http://a" has none. */
struct parts {
    char *scheme, *authority, *path, *query, *fragment;
};

static char *piece(const char *start, size_t bytes)
{
    char *copy = memory_array(bytes + 1, 1);
    memcpy(copy, start, bytes);
    return copy;
}

static bool starts_with_scheme(const char *text, size_t *scheme_bytes)
{
    static const char letters[] = "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ";
    size_t first = strspn(text, letters) > 0 ? 1 : 0;
    *scheme_bytes = strspn(text, "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789+-.");
    return first == 1 && text[*scheme_bytes] == ':';
}

/* Section 3 and appendix B. */
static struct parts split(const char *text)
{
    struct parts parts = {0};
    size_t bytes;
    if (starts_with_scheme(text, &bytes)) {
        parts.scheme = piece(text, bytes);
        text += bytes + 1;
    }
    if (strncmp(text, "//", 2) == 0) {
        bytes = strcspn(text + 2, "/?#");
        parts.authority = piece(text + 2, bytes);
        text += 2 + bytes;
    }
    bytes = strcspn(text, "?#");
    parts.path = piece(text, bytes);
    text += bytes;
    if (*text == '?') {
        bytes = strcspn(text + 1, "#");
        parts.query = piece(text + 1, bytes);
        text += 1 + bytes;
    }
    if (*text == '#')
        parts.fragment = piece(text + 1, strlen(text + 1));
    return parts;
}

static void parts_free(struct parts *parts)
{
    free(parts->scheme);
    free(parts->authority);
    free(parts->path);
    free(parts->query);
    free(parts->fragment);
}

void reference_remove_dot_segments(char *path)
{
    char *input = path, *output = path; /* the output never overtakes the input */
    while (*input != '\0') {
        if (strncmp(input, "../", 3) == 0) {
            input += 3;
        } else if (strncmp(input, "./", 2) == 0 || strncmp(input, "/./", 3) == 0) {
            input += 2;
        } else if (strcmp(input, "/.") == 0) {
            *++input = '/'; /* "/." stands for "/" */
        } else if (strncmp(input, "/../", 4) == 0 || strcmp(input, "/..") == 0) {
            while (output > path && *--output != '/')
                continue;
            input += input[3] == '/' ? 3 : 2;
            *input = '/';
        } else if (strcmp(input, ".") == 0 || strcmp(input, "..") == 0) {
            break;
        } else {
            do
                *output++ = *input++;
            while (*input != '\0' && *input != '/');
        }
    }
    *output = '\0';
}

/* Section 5.2.3. */
static char *merge(const struct parts *base, const char *path)
{
    if (base->authority != NULL && base->path[0] == '\0')
        return memory_text("/%s", path);
    const char *last = strrchr(base->path, '/');
    return memory_text("%.*s%s", last != NULL ? (int)(last + 1 - base->path) : 0, base->path, path);
}

/* Section 5.3. */
static char *join(const char *scheme, const char *authority, const char *path, const char *query, const char *fragment)
{
    return memory_text("%s%s%s%s%s%s%s%s%s", scheme != NULL ? scheme : "", scheme != NULL ? ":" : "",
                       authority != NULL ? "//" : "", authority != NULL ? authority : "", path,
                       query != NULL ? "?" : "", query != NULL ? query : "", fragment != NULL ? "#" : "",
                       fragment != NULL ? fragment : "");
}

/* Section 5.2.2. */
char *reference_resolve(const char *base, const char *reference)
{
    struct parts b = split(base), r = split(reference);
    const char *scheme = r.scheme != NULL ? r.scheme : b.scheme;
    const char *authority = r.authority, *query = r.query;
    char *path;
    if (r.scheme != NULL || r.authority != NULL || r.path[0] == '/') {
        path = memory_text("%s", r.path);
        if (r.scheme == NULL && r.authority == NULL)
            authority = b.authority;
    } else {
        authority = b.authority;
        path = r.path[0] == '\0' ? memory_text("%s", b.path) : merge(&b, r.path);
        if (r.path[0] == '\0' && r.query == NULL)
            query = b.query;
    }
    if (r.path[0] != '\0')
        reference_remove_dot_segments(path);
    char *result = join(scheme, authority, path, query, r.fragment);
    free(path);
    parts_free(&b);
    parts_free(&r);
    return result;
}
