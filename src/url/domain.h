/* domain: the registered domain of a host, by the Public Suffix List built into libpsl.
 *
 * a.b.co.uk belongs to b.co.uk. IP addresses, and hosts without a registered domain (a single label, a
 * public suffix itself), are their own domain.
 *
 * Threads: safe everywhere; the list is constant.
 */
#ifndef WINDROW_URL_DOMAIN_H
#define WINDROW_URL_DOMAIN_H

#include <stdbool.h>

/* host: a host in normal form, ended by a NUL (windrow_key_host() writes one). Returns where in `host`
 * its registered domain begins; that is `host` itself where it has none of its own. */
const char *windrow_domain(const char *host);

/* True for a label in lower case that the list itself names as a top-level domain ("org"; not "example"). */
bool windrow_domain_top_level(const char *label);

/* The library's version and the fingerprint of its list, for the record in a store, because domains change with
 * the list. Constant text, e.g. "libpsl 0.21.2, list 5f1c...". */
const char *windrow_domain_version(void);

#endif
