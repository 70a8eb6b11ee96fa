#include "url/key.h"

#include <string.h>

enum { LABEL_SEPARATOR = 0x01, HTTP = 0x01, HTTP_WITH_PORT = 0x02, HTTPS = 0x03, HTTPS_WITH_PORT = 0x04 };

int windrow_key_compare(const char *a, size_t a_bytes, const char *b, size_t b_bytes)
{
    size_t both = a_bytes < b_bytes ? a_bytes : b_bytes;
    int order = both ? memcmp(a, b, both) : 0; /* an empty key may have no address */
    return order != 0 ? order : (a_bytes > b_bytes) - (a_bytes < b_bytes);
}

/* Writes the parts of `text` between `from` bytes in reverse order, with `to` bytes between them. */
static void parts_reverse(const char *text, size_t bytes, char from, char to, char *out)
{
    size_t end = bytes;
    for (;;) {
        const char *separator = memrchr(text, from, end);
        size_t start = separator != NULL ? (size_t)(separator - text) + 1 : 0;
        out = mempcpy(out, text + start, end - start);
        if (separator == NULL)
            return;
        *out++ = to;
        end = start - 1;
    }
}

size_t windrow_key_front(const struct windrow_url_front *front, const char *host, char *out)
{
    size_t bytes = front->host_bytes;
    if (host[0] == '[')
        memcpy(out, host, bytes);
    else
        parts_reverse(host, bytes, '.', LABEL_SEPARATOR, out);
    out[bytes++] = '\0';
    out[bytes++] = front->https ? (front->with_port ? HTTPS_WITH_PORT : HTTPS) : (front->with_port ? HTTP_WITH_PORT : HTTP);
    if (front->with_port) {
        out[bytes++] = (char)(front->port >> 8);
        out[bytes++] = (char)(front->port & 255);
    }
    return bytes;
}

size_t windrow_key_host_bytes(const char *key, size_t key_bytes)
{
    const char *end = memchr(key, '\0', key_bytes);
    return end != NULL ? (size_t)(end - key) : key_bytes;
}

size_t windrow_key_host(const char *key, size_t key_bytes, char *out, size_t capacity)
{
    size_t host_bytes = windrow_key_host_bytes(key, key_bytes);
    if (host_bytes >= capacity)
        return 0;
    parts_reverse(key, host_bytes, LABEL_SEPARATOR, '.', out);
    out[host_bytes] = '\0';
    return host_bytes;
}

/* Reads what stands before the path; *path is where that begins. False when it is cut short or no scheme. */
static bool front_read(const char *key, size_t key_bytes, struct windrow_url_front *front, size_t *path)
{
    size_t at = windrow_key_host_bytes(key, key_bytes);
    front->host_bytes = at;
    if (key_bytes - at < 2)
        return false;
    unsigned char scheme = (unsigned char)key[at + 1];
    at += 2;
    if (scheme < HTTP || scheme > HTTPS_WITH_PORT)
        return false;
    front->https = scheme >= HTTPS;
    front->with_port = scheme == HTTP_WITH_PORT || scheme == HTTPS_WITH_PORT;
    front->port = 0;
    if (front->with_port) {
        if (key_bytes - at < 2)
            return false;
        front->port = (uint16_t)((unsigned char)key[at] << 8 | (unsigned char)key[at + 1]);
        at += 2;
    }
    *path = at;
    return true;
}

size_t windrow_key_url(const char *key, size_t key_bytes, char *out, size_t capacity)
{
    struct windrow_url_front front;
    size_t path;
    if (!front_read(key, key_bytes, &front, &path))
        return 0;
    size_t url_bytes = windrow_url_length(&front, key_bytes - path);
    if (url_bytes > capacity)
        return 0;
    char *write = mempcpy(out, front.https ? "https://" : "http://", front.https ? 8 : 7);
    parts_reverse(key, front.host_bytes, LABEL_SEPARATOR, '.', write);
    write += front.host_bytes;
    if (front.with_port) {
        size_t digits = url_bytes - (size_t)(write - out) - (key_bytes - path) - 1;
        *write = ':';
        unsigned port = front.port;
        for (size_t i = digits; i > 0; i--, port /= 10)
            write[i] = (char)('0' + port % 10);
        write += digits + 1;
    }
    memcpy(write, key + path, key_bytes - path);
    return url_bytes;
}

static bool host_valid(const char *host, size_t bytes)
{
    if (bytes == 0 || bytes > WINDROW_KEY_BYTES_MAX)
        return false;
    if (host[0] == '[') {
        for (size_t i = 0; i < bytes; i++)
            if (host[i] >= 'A' && host[i] <= 'Z')
                return false;
        return windrow_url_is_ipv6(host, bytes);
    }
    bool label_empty = true;
    for (size_t i = 0; i < bytes; i++) {
        char byte = host[i];
        if (byte == LABEL_SEPARATOR) {
            if (label_empty)
                return false;
            label_empty = true;
        } else if ((byte >= 'a' && byte <= 'z') || (byte >= '0' && byte <= '9') || byte == '-' || byte == '_') {
            label_empty = false;
        } else {
            return false;
        }
    }
    return !label_empty;
}

/* The value of an upper-case hex digit, -1 for any other byte. */
static int upper_hex_value(char byte)
{
    if (byte >= '0' && byte <= '9')
        return byte - '0';
    return byte >= 'A' && byte <= 'F' ? byte - 'A' + 10 : -1;
}

/* True when the segment at path[start] (a '/') is a dot segment. */
static bool dot_segment(const char *path, size_t bytes, size_t start)
{
    size_t end = start + 1;
    while (end < bytes && end - start < 3 && path[end] == '.')
        end++;
    return end - start > 1 && (end == bytes || path[end] == '/' || path[end] == '?');
}

static bool path_valid(const char *path, size_t bytes)
{
    if (bytes == 0 || path[0] != '/')
        return false;
    bool query = false;
    for (size_t i = 0; i < bytes; i++) {
        query = query || path[i] == '?';
        if (path[i] == '%') {
            int high = i + 2 < bytes ? upper_hex_value(path[i + 1]) : -1;
            int low = i + 2 < bytes ? upper_hex_value(path[i + 2]) : -1;
            if (high < 0 || low < 0 || windrow_url_unreserved_byte((unsigned char)(high << 4 | low)))
                return false;
            i += 2;
        } else if (!windrow_url_path_byte((unsigned char)path[i])) {
            return false;
        } else if (path[i] == '/' && !query && dot_segment(path, bytes, i)) {
            return false;
        }
    }
    return true;
}

bool windrow_key_validate(const char *key, size_t key_bytes)
{
    struct windrow_url_front front;
    size_t path;
    if (!front_read(key, key_bytes, &front, &path))
        return false;
    if (front.with_port && front.port == (front.https ? 443 : 80))
        return false;
    return host_valid(key, front.host_bytes) && path_valid(key + path, key_bytes - path) &&
           windrow_url_length(&front, key_bytes - path) <= WINDROW_URL_BYTES_MAX;
}
