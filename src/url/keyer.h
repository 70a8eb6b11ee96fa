/* keyer: from the text of a URL to its page key, fast.
 *
 * The result equals windrow_url_normalise() turned into a key (url/normal.h, url/key.h). What makes it
 * fast: recent scheme-and-authority texts are remembered with the front of their key, and a path that
 * is in normal form already, as most are, is only checked and copied.
 *
 * Threads: a keyer belongs to one thread at a time; make one for each.
 */
#ifndef WINDROW_URL_KEYER_H
#define WINDROW_URL_KEYER_H

#include "base/error.h"
#include "url/key.h"

struct windrow_keyer;

/* Makes a keyer: some 400 KB, of which most is touched only by very long URLs. WINDROW_RESOURCE without memory. */
enum windrow_status windrow_keyer_create(struct windrow_keyer **keyer);

/* Frees it; NULL is fine. */
void windrow_keyer_destroy(struct windrow_keyer *keyer);

/* Makes the page key of a URL.
 *
 * text, bytes      any bytes, not ended by a NUL; nothing outside of them is read
 * key, key_bytes   the key, set when the verdict is WINDROW_URL_OK; the keyer's, valid until its next call
 */
enum windrow_url_verdict windrow_keyer_key(struct windrow_keyer *keyer, const char *text, size_t bytes,
                                           const char **key, size_t *key_bytes);

#endif
