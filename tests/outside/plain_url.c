#include "plain_web.h"

#include <ctype.h>
#include <stdbool.h>
#include <stdlib.h>
#include <string.h>
#include <strings.h>

#include "../common/memory.h"
#include "reference.h"

#define LONGEST_URL_BYTES 65536

static const char letters[] = "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ";
static const char host_bytes[] = "abcdefghijklmnopqrstuvwxyz0123456789.-_";
static const char unreserved[] = "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789-._~";
static const char others_in_path[] = "!$&'()*+,;=:@/"; /* sub-delims, and what a segment may hold besides */
static const char others_in_query[] = "!$&'()*+,;=:@/?";

static bool holds(const char *set, char byte)
{
    return byte != '\0' && strchr(set, byte) != NULL;
}

static int hex_value(const char *escape)
{
    if (escape[0] != '%' || !isxdigit((unsigned char)escape[1]) || !isxdigit((unsigned char)escape[2]))
        return -1;
    char digits[3] = {escape[1], escape[2], '\0'};
    return (int)strtol(digits, NULL, 16);
}

/* Appends `text` with escapes brought into one form; returns the new end. */
static char *write_escaped(char *end, const char *text, const char *others)
{
    static const char upper[] = "0123456789ABCDEF";
    for (; *text != '\0'; text++) {
        int value = hex_value(text);
        unsigned char byte = value >= 0 ? (unsigned char)value : (unsigned char)*text;
        bool plain = value >= 0 ? holds(unreserved, (char)byte) : holds(unreserved, *text) || holds(others, *text);
        if (plain) {
            *end++ = (char)byte;
        } else {
            *end++ = '%';
            *end++ = upper[byte >> 4];
            *end++ = upper[byte & 15];
        }
        if (value >= 0)
            text += 2;
    }
    *end = '\0';
    return end;
}

/* Takes the port off `authority`, leaving the host. False when there is something that is no port. */
static bool take_port(char *authority, bool secure, char port_text[8])
{
    port_text[0] = '\0';
    char *colon = authority[0] == '[' ? strchr(authority, ']') : strchr(authority, ':');
    if (authority[0] == '[') {
        if (colon == NULL || (colon[1] != ':' && colon[1] != '\0'))
            return false;
        colon = colon[1] == ':' ? colon + 1 : NULL;
    }
    if (colon == NULL)
        return true;
    *colon = '\0';
    const char *digits = colon + 1;
    if (digits[strspn(digits, "0123456789")] != '\0')
        return false;
    digits += strspn(digits, "0");
    if (strlen(digits) > 5 || atol(digits) > 65535)
        return false;
    bool empty = colon[1] == '\0';
    if (!empty && atol(digits) != (secure ? 443 : 80)) {
        char *end = port_text;
        *end++ = ':';
        strcpy(end, *digits != '\0' ? digits : "0");
    }
    return true;
}

static bool good_host(char *host)
{
    size_t length = strlen(host);
    for (char *byte = host; *byte != '\0'; byte++)
        *byte = (char)tolower((unsigned char)*byte);
    if (host[0] == '[')
        return length > 3 && host[length - 1] == ']' && strspn(host + 1, "0123456789abcdef:.") == length - 2;
    if (length > 0 && host[length - 1] == '.')
        host[--length] = '\0';
    return length > 0 && host[0] != '.' && host[length - 1] != '.' && strstr(host, "..") == NULL &&
           strspn(host, host_bytes) == length;
}

static enum plain_form normal_web_url(bool secure, char *rest, char **normal)
{
    if (strncmp(rest, "//", 2) != 0)
        return PLAIN_MALFORMED;
    size_t authority_bytes = strcspn(rest + 2, "/?");
    char *authority = memory_text("%.*s", (int)authority_bytes, rest + 2);
    char *host = strrchr(authority, '@') != NULL ? strrchr(authority, '@') + 1 : authority;
    char port[8];
    enum plain_form form = PLAIN_MALFORMED;
    if (take_port(host, secure, port) && good_host(host)) {
        char *path = rest + 2 + authority_bytes;
        char *query = strchr(path, '?');
        if (query != NULL)
            *query++ = '\0';
        char *clean = memory_array(3 * (strlen(path) + (query != NULL ? strlen(query) : 0)) + 4, 1);
        write_escaped(clean, path, others_in_path);
        reference_remove_dot_segments(clean);
        if (clean[0] == '\0')
            strcpy(clean, "/");
        if (query != NULL) {
            char *end = clean + strlen(clean);
            *end++ = '?';
            write_escaped(end, query, others_in_query);
        }
        *normal = memory_text("%s://%s%s%s", secure ? "https" : "http", host, port, clean);
        free(clean);
        form = PLAIN_KEPT;
    }
    free(authority);
    return form;
}

enum plain_form plain_url(const char *url, char **normal)
{
    *normal = NULL;
    if (strlen(url) > LONGEST_URL_BYTES)
        return PLAIN_MALFORMED;
    url += strspn(url, " \t\r\n\f\v");
    char *text = memory_text("%.*s", (int)strcspn(url, "#"), url);
    for (size_t length = strlen(text); length > 0 && strchr(" \t\r\n\f\v", text[length - 1]) != NULL; length--)
        text[length - 1] = '\0';
    size_t scheme_bytes = strspn(text, "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789+-.");
    enum plain_form form = PLAIN_SCHEME;
    if (strspn(text, letters) == 0 || text[scheme_bytes] != ':')
        form = PLAIN_MALFORMED;
    else if (scheme_bytes == 4 && strncasecmp(text, "http", 4) == 0)
        form = normal_web_url(false, text + 5, normal);
    else if (scheme_bytes == 5 && strncasecmp(text, "https", 5) == 0)
        form = normal_web_url(true, text + 6, normal);
    free(text);
    return form;
}
