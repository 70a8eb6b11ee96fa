/* key: page keys, the sortable form of a URL.
 *
 * The memcmp order of page keys (a key that is the beginning of another comes first) is host order: by
 * host, label by label from the top-level domain down, a host right before its subdomains; then by
 * scheme, port, path and query. A key turns back into the URL in normal form, one to one.
 *
 *   bytes        meaning
 *   host         the host's labels, last one first, joined by 0x01; a bracketed IPv6 literal is one label
 *   1            0x00
 *   1            scheme and port: 0x01 http, 0x02 http with port, 0x03 https, 0x04 https with port
 *   2, with port the port, most significant byte first
 *   rest         path and query as in the normal form; starts with '/'
 *
 * Example: https://www.north.example/a?b is "example" 01 "north" 01 "www" 00 03 "/a?b".
 *
 * Functions that take a key never read outside of it, whatever bytes it holds; keys from a file are to
 * be checked with windrow_key_validate() first. Threads: nothing but the arguments is touched.
 */
#ifndef WINDROW_URL_KEY_H
#define WINDROW_URL_KEY_H

#include "url/normal.h"

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

/* A key is shorter than the URL that it stands for. */
#define WINDROW_KEY_BYTES_MAX WINDROW_URL_BYTES_MAX

/* Compares two keys: negative, 0 or positive as memcmp; the shorter one first where one begins the other. */
int windrow_key_compare(const char *a, size_t a_bytes, const char *b, size_t b_bytes);

/* Writes the front of a key, all that stands before its path.
 *
 * host      in normal form, front->host_bytes long
 * out       room for front->host_bytes + 4
 *
 * Returns the bytes written.
 */
size_t windrow_key_front(const struct windrow_url_front *front, const char *host, char *out);

/* Writes the URL in normal form, without a NUL.
 *
 * Returns its length; 0, with nothing useful in `out`, when capacity is too small or the key is not well-formed.
 * WINDROW_URL_BYTES_MAX is always enough for a valid key.
 */
size_t windrow_key_url(const char *key, size_t key_bytes, char *out, size_t capacity);

/* The bytes of the key that hold its host (all before the 0x00): keys with the same host share them.
 * key_bytes when there is no 0x00. */
size_t windrow_key_host_bytes(const char *key, size_t key_bytes);

/* Writes the host's text ("www.north.example") and a NUL.
 *
 * Also takes the host part of a key alone. Returns the text's length without the NUL, which is
 * windrow_key_host_bytes(); 0 when that and the NUL do not fit in capacity.
 */
size_t windrow_key_host(const char *key, size_t key_bytes, char *out, size_t capacity);

/* True exactly for the keys of URLs in normal form: for keys that were read back from a file. */
bool windrow_key_validate(const char *key, size_t key_bytes);

#endif
