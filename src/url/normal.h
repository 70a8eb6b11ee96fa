/* normal: the normal form of a URL.
 *
 * RFC 3986 syntax-based and scheme-based normalisation (sections 6.2.2 and 6.2.3), with these choices:
 *  - surrounding ASCII white space is trimmed, the fragment is cut at the first '#';
 *  - http and https are kept; any other scheme is WINDROW_URL_SCHEME, none at all is malformed, and so
 *    is http or https without "//" behind it;
 *  - the authority ends at the first '/' or '?'; user information (all before its last '@'), a default
 *    and an empty port, and one trailing dot of the host are removed; a port is digits, at most 65535;
 *  - a host in ASCII is taken as it is, in lower case; other hosts go to A-labels (UTS 46,
 *    non-transitional, by libidn2). After that a host is letters, digits, '-', '_' in non-empty labels
 *    between dots, or a bracketed IPv6 literal: anything else is malformed, percent escapes included;
 *  - in path and query, escapes of unreserved characters are decoded, other escapes get upper-case
 *    digits, a '%' without two hex digits becomes "%25", and bytes that RFC 3986 does not allow there
 *    are escaped one by one (non-ASCII: RFC 3987 section 3.1);
 *  - after that, dot segments are removed (section 5.2.4). An empty path is "/"; "//" in a path stays.
 *
 * This file is the plain way, without caches or short cuts; url/keyer.h is the fast one for whole dumps,
 * and the tests hold the two against each other.
 *
 * Threads: every function touches nothing but its arguments.
 */
#ifndef WINDROW_URL_NORMAL_H
#define WINDROW_URL_NORMAL_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

/* A URL (after trimming) and its normal form are at most this long; longer ones are malformed. */
#define WINDROW_URL_BYTES_MAX 65536

enum windrow_url_verdict {
    WINDROW_URL_OK,
    WINDROW_URL_MALFORMED,
    WINDROW_URL_SCHEME, /* well-formed as far as its scheme, which is neither http nor https */
    WINDROW_URL_MEMORY  /* no memory for the conversion of an international host; says nothing about the URL */
};

/* What stands in front of the path. */
struct windrow_url_front {
    bool https;
    bool with_port; /* a port other than the scheme's default */
    uint16_t port;
    size_t host_bytes; /* of the host in normal form */
    size_t text_bytes; /* of the input text, scheme and authority */
};

/* Cuts the surrounding white space off: moves *text and *bytes. */
void windrow_url_trim(const char **text, size_t *bytes);

/* Reads scheme and authority of a trimmed text.
 *
 * text, bytes   any bytes; text need not end in a NUL
 * front         filled when the verdict is WINDROW_URL_OK
 * host          receives the host in normal form; room for WINDROW_URL_BYTES_MAX + 1 bytes
 */
enum windrow_url_verdict windrow_url_front(const char *text, size_t bytes, struct windrow_url_front *front,
                                           char *host);

/* Writes the normal form of path and query.
 *
 * text, bytes   what follows the authority: empty, or starting with '/', '?' or '#'
 * out           room for 3 * bytes + 1
 *
 * Returns the bytes written, at least 1.
 */
size_t windrow_url_path(const char *text, size_t bytes, char *out);

/* The length of the normal form with this front and path_bytes of path and query. */
size_t windrow_url_length(const struct windrow_url_front *front, size_t path_bytes);

/* Writes the normal form of a URL.
 *
 * text, bytes   any bytes
 * out           room for WINDROW_URL_BYTES_MAX; contents undefined unless the verdict is WINDROW_URL_OK
 * out_bytes     the length of the normal form
 */
enum windrow_url_verdict windrow_url_normalise(const char *text, size_t bytes, char *out, size_t *out_bytes);

/* True for the text of an IPv6 address in brackets. */
bool windrow_url_is_ipv6(const char *host, size_t host_bytes);

/* True for a byte that stands in a path or query as it is ('%' does not; '?' counts although it ends a path). */
bool windrow_url_path_byte(unsigned char byte);

/* True for RFC 3986's unreserved characters: letters, digits, '-', '.', '_', '~'. */
bool windrow_url_unreserved_byte(unsigned char byte);

/* The version of the library behind the international host names, for the record in a store. */
const char *windrow_url_idn_version(void);

#endif
