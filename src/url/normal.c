#include "url/normal.h"

#include <arpa/inet.h>
#include <idn2.h>
#include <stdlib.h>
#include <string.h>

static bool is_letter(unsigned char byte)
{
    return (byte | 0x20) >= 'a' && (byte | 0x20) <= 'z';
}

static bool is_digit(unsigned char byte)
{
    return byte >= '0' && byte <= '9';
}

static bool is_space(unsigned char byte)
{
    return byte == ' ' || (byte >= '\t' && byte <= '\r');
}

static char lower(char byte)
{
    return byte >= 'A' && byte <= 'Z' ? (char)(byte + ('a' - 'A')) : byte;
}

/* The value of a hex digit, -1 for any other byte. */
static int hex_value(unsigned char byte)
{
    if (is_digit(byte))
        return byte - '0';
    byte |= 0x20;
    return byte >= 'a' && byte <= 'f' ? byte - 'a' + 10 : -1;
}

bool windrow_url_unreserved_byte(unsigned char byte)
{
    return is_letter(byte) || is_digit(byte) || byte == '-' || byte == '.' || byte == '_' || byte == '~';
}

bool windrow_url_path_byte(unsigned char byte)
{
    /* RFC 3986: pchar without its escapes, and '/' and '?'. memchr, since strchr would find the NUL. */
    static const char others[] = "!$&'()*+,;=:@/?";
    return windrow_url_unreserved_byte(byte) || memchr(others, byte, sizeof others - 1) != NULL;
}

void windrow_url_trim(const char **text, size_t *bytes)
{
    while (*bytes > 0 && is_space((unsigned char)(*text)[*bytes - 1]))
        --*bytes;
    while (*bytes > 0 && is_space((unsigned char)**text)) {
        ++*text;
        --*bytes;
    }
}

bool windrow_url_is_ipv6(const char *host, size_t host_bytes)
{
    char address[INET6_ADDRSTRLEN];
    struct in6_addr parsed;
    if (host_bytes < 4 || host[0] != '[' || host[host_bytes - 1] != ']' || host_bytes - 2 >= sizeof address)
        return false;
    memcpy(address, host + 1, host_bytes - 2);
    address[host_bytes - 2] = '\0';
    return strlen(address) == host_bytes - 2 && inet_pton(AF_INET6, address, &parsed) == 1;
}

/* Converts a host with non-ASCII characters, in place, to A-labels. */
static enum windrow_url_verdict host_to_ascii(char *host, size_t *host_bytes)
{
    if (memchr(host, '\0', *host_bytes) != NULL)
        return WINDROW_URL_MALFORMED;
    host[*host_bytes] = '\0';
    char *ascii = NULL;
    int result = idn2_to_ascii_8z(host, &ascii, IDN2_NFC_INPUT | IDN2_NONTRANSITIONAL);
    if (result == IDN2_MALLOC)
        return WINDROW_URL_MEMORY;
    if (result != IDN2_OK)
        return WINDROW_URL_MALFORMED;
    size_t ascii_bytes = strlen(ascii);
    enum windrow_url_verdict verdict = WINDROW_URL_MALFORMED;
    if (ascii_bytes <= WINDROW_URL_BYTES_MAX) {
        memcpy(host, ascii, ascii_bytes);
        *host_bytes = ascii_bytes;
        verdict = WINDROW_URL_OK;
    }
    idn2_free(ascii);
    return verdict;
}

/* Brings a host that is no IPv6 literal into normal form, in place. */
static enum windrow_url_verdict host_normalise(char *host, size_t *host_bytes)
{
    bool ascii = true;
    for (size_t i = 0; i < *host_bytes; i++)
        ascii = ascii && (unsigned char)host[i] < 0x80;
    if (!ascii) {
        enum windrow_url_verdict verdict = host_to_ascii(host, host_bytes);
        if (verdict != WINDROW_URL_OK)
            return verdict;
    }
    size_t bytes = *host_bytes;
    if (bytes > 0 && host[bytes - 1] == '.')
        bytes--;
    *host_bytes = bytes;
    if (bytes == 0 || host[0] == '.' || host[bytes - 1] == '.')
        return WINDROW_URL_MALFORMED;
    for (size_t i = 0; i < bytes; i++) {
        unsigned char byte = (unsigned char)host[i];
        if (!is_letter(byte) && !is_digit(byte) && byte != '-' && byte != '_' && byte != '.')
            return WINDROW_URL_MALFORMED;
        if (byte == '.' && host[i - 1] == '.')
            return WINDROW_URL_MALFORMED;
        host[i] = lower(host[i]);
    }
    return WINDROW_URL_OK;
}

/* Reads the digits behind the host's ':'. */
static bool port_read(const char *text, size_t bytes, struct windrow_url_front *front)
{
    uint32_t port = 0;
    for (size_t i = 0; i < bytes; i++) {
        if (!is_digit((unsigned char)text[i]))
            return false;
        port = port * 10 + (uint32_t)(text[i] - '0');
        if (port > 65535)
            return false;
    }
    front->port = (uint16_t)port;
    front->with_port = bytes > 0 && port != (front->https ? 443 : 80);
    return true;
}

static enum windrow_url_verdict scheme_read(const char *text, size_t bytes, bool *https, size_t *scheme_bytes)
{
    size_t end = 0;
    while (end < bytes && (is_letter((unsigned char)text[end]) ||
                           (end > 0 && (is_digit((unsigned char)text[end]) || text[end] == '+' ||
                                        text[end] == '-' || text[end] == '.'))))
        end++;
    if (end == 0 || end == bytes || text[end] != ':')
        return WINDROW_URL_MALFORMED;
    char name[6] = "";
    for (size_t i = 0; i < end && i < sizeof name; i++)
        name[i] = lower(text[i]);
    if (end == 4 && memcmp(name, "http", 4) == 0)
        *https = false;
    else if (end == 5 && memcmp(name, "https", 5) == 0)
        *https = true;
    else
        return WINDROW_URL_SCHEME;
    *scheme_bytes = end + 1;
    return WINDROW_URL_OK;
}

enum windrow_url_verdict windrow_url_front(const char *text, size_t bytes, struct windrow_url_front *front,
                                           char *host)
{
    if (bytes > WINDROW_URL_BYTES_MAX)
        return WINDROW_URL_MALFORMED;
    size_t start;
    enum windrow_url_verdict verdict = scheme_read(text, bytes, &front->https, &start);
    if (verdict != WINDROW_URL_OK)
        return verdict;
    if (bytes - start < 2 || text[start] != '/' || text[start + 1] != '/')
        return WINDROW_URL_MALFORMED;
    start += 2;

    size_t end = start;
    while (end < bytes && text[end] != '/' && text[end] != '?' && text[end] != '#')
        end++;
    front->text_bytes = end;
    const char *user_end = memrchr(text + start, '@', end - start);
    if (user_end != NULL)
        start = (size_t)(user_end - text) + 1;

    const char *name = text + start;
    size_t name_bytes = end - start;
    bool bracketed = name_bytes > 0 && name[0] == '[';
    const char *bracket = bracketed ? memchr(name, ']', name_bytes) : NULL;
    size_t host_bytes = bracket != NULL ? (size_t)(bracket - name) + 1 : 0;
    if (!bracketed) {
        const char *colon = memchr(name, ':', name_bytes);
        host_bytes = colon != NULL ? (size_t)(colon - name) : name_bytes;
    }
    front->with_port = false;
    front->port = 0;
    if (host_bytes < name_bytes &&
        (name[host_bytes] != ':' || !port_read(name + host_bytes + 1, name_bytes - host_bytes - 1, front)))
        return WINDROW_URL_MALFORMED;

    memcpy(host, name, host_bytes);
    front->host_bytes = host_bytes;
    if (!bracketed)
        return host_normalise(host, &front->host_bytes);
    if (!windrow_url_is_ipv6(host, host_bytes))
        return WINDROW_URL_MALFORMED;
    for (size_t i = 0; i < host_bytes; i++)
        host[i] = lower(host[i]);
    return WINDROW_URL_OK;
}

/* Removes the dot segments of a path that starts with '/', in place (RFC 3986 section 5.2.4); returns
 * its new length. */
static size_t dot_segments_remove(char *path, size_t bytes)
{
    size_t written = 0;
    for (size_t start = 0, end; start < bytes; start = end) {
        const char *slash = memchr(path + start + 1, '/', bytes - start - 1);
        end = slash != NULL ? (size_t)(slash - path) : bytes;
        size_t segment_bytes = end - start - 1;
        bool one = segment_bytes == 1 && path[start + 1] == '.';
        bool two = segment_bytes == 2 && path[start + 1] == '.' && path[start + 2] == '.';
        if (two) {
            const char *last = memrchr(path, '/', written);
            written = last != NULL ? (size_t)(last - path) : 0;
        }
        if (!one && !two) {
            memmove(path + written, path + start, end - start);
            written += end - start;
        } else if (end == bytes) {
            path[written++] = '/';
        }
    }
    return written;
}

static char *escape_write(char *out, unsigned char byte)
{
    static const char digits[] = "0123456789ABCDEF";
    *out++ = '%';
    *out++ = digits[byte >> 4];
    *out++ = digits[byte & 15];
    return out;
}

size_t windrow_url_path(const char *text, size_t bytes, char *out)
{
    const char *fragment = memchr(text, '#', bytes);
    if (fragment != NULL)
        bytes = (size_t)(fragment - text);
    char *write = out, *query = NULL;
    if (bytes == 0 || text[0] != '/')
        *write++ = '/';
    for (size_t i = 0; i < bytes; i++) {
        unsigned char byte = (unsigned char)text[i];
        if (byte == '?' && query == NULL)
            query = write;
        if (byte == '%') {
            int high = i + 2 < bytes ? hex_value((unsigned char)text[i + 1]) : -1;
            int low = i + 2 < bytes ? hex_value((unsigned char)text[i + 2]) : -1;
            if (high >= 0 && low >= 0) {
                byte = (unsigned char)(high << 4 | low);
                i += 2;
                if (windrow_url_unreserved_byte(byte)) {
                    *write++ = (char)byte;
                    continue;
                }
            }
            write = escape_write(write, byte);
        } else if (windrow_url_path_byte(byte)) {
            *write++ = (char)byte;
        } else {
            write = escape_write(write, byte);
        }
    }
    size_t query_bytes = query != NULL ? (size_t)(write - query) : 0;
    size_t path_bytes = (size_t)(write - out) - query_bytes;
    size_t kept_bytes = dot_segments_remove(out, path_bytes);
    memmove(out + kept_bytes, out + path_bytes, query_bytes);
    return kept_bytes + query_bytes;
}

static size_t port_write(uint16_t port, char *out)
{
    char reversed[5];
    size_t digits = 0;
    do {
        reversed[digits++] = (char)('0' + port % 10);
        port /= 10;
    } while (port > 0);
    for (size_t i = 0; i < digits; i++)
        out[i] = reversed[digits - 1 - i];
    return digits;
}

size_t windrow_url_length(const struct windrow_url_front *front, size_t path_bytes)
{
    char digits[5];
    return (front->https ? 8 : 7) + front->host_bytes + (front->with_port ? 1 + port_write(front->port, digits) : 0) +
           path_bytes;
}

enum windrow_url_verdict windrow_url_normalise(const char *text, size_t bytes, char *out, size_t *out_bytes)
{
    windrow_url_trim(&text, &bytes);
    enum windrow_url_verdict verdict = WINDROW_URL_MALFORMED;
    struct windrow_url_front front;
    char *host = malloc(WINDROW_URL_BYTES_MAX + 1), *path = NULL;
    if (host == NULL)
        return WINDROW_URL_MEMORY;
    verdict = windrow_url_front(text, bytes, &front, host);
    if (verdict != WINDROW_URL_OK)
        goto out;
    path = malloc(3 * (bytes - front.text_bytes) + 1);
    if (path == NULL) {
        verdict = WINDROW_URL_MEMORY;
        goto out;
    }
    size_t path_bytes = windrow_url_path(text + front.text_bytes, bytes - front.text_bytes, path);
    *out_bytes = windrow_url_length(&front, path_bytes);
    if (*out_bytes > WINDROW_URL_BYTES_MAX) {
        verdict = WINDROW_URL_MALFORMED;
        goto out;
    }
    char *write = mempcpy(out, front.https ? "https://" : "http://", front.https ? 8 : 7);
    write = mempcpy(write, host, front.host_bytes);
    if (front.with_port) {
        *write++ = ':';
        write += port_write(front.port, write);
    }
    memcpy(write, path, path_bytes);
out:
    free(path);
    free(host);
    return verdict;
}

const char *windrow_url_idn_version(void)
{
    return idn2_check_version(NULL);
}
