/* variants: pages of one store whose URLs differ only by scheme, by a leading "www." label, or by a slash at
 * the end of the path: probably one page under several names.
 *
 * Normalisation does not guess at such things; this room counts them and writes alias candidates, which a
 * person may look through and feed back with --aliases. Of a group of such URLs one is the TO of all others:
 * https before http (the form that sites redirect to, and that cannot be tampered with on the way), then
 * without "www." before with (the shorter name of the same host), then with the slash before without (servers
 * answer the name of a directory with a redirect to that form; common practice, no source). The rule looks at nothing but the
 * URLs, so that two crawls never disagree about a group's direction.
 *
 * Where a port is named, http and https on it are not taken for variants: one port speaks one of them.
 *
 * Out of core: pages are sorted by a hash of what their variants share; those whose hash is met more
 * than once are looked up, in page order, and sorted by the shared text itself, so that equal hashes of different
 * texts do no harm; the lines are sorted once more by FROM. All sorting is shard/sorter.h's.
 */
#ifndef WINDROW_SHARD_VARIANTS_H
#define WINDROW_SHARD_VARIANTS_H

#include "base/meter.h"
#include "store/store.h"
#include "url/key.h"

/* What one URL has and its variants may lack; as numbers, the larger one is the better TO. */
enum { WINDROW_VARIANT_SLASH = 1, WINDROW_VARIANT_BARE = 2 /* no "www." */, WINDROW_VARIANT_HTTPS = 4 };

/* Writes what all variants of a page key share: http, no "www.", no slash at the end of the path.
 *
 * key       a valid page key
 * out       room for key_bytes
 * features  the flags above that the key has
 *
 * Returns the bytes written. Equal results mean variants (or equal keys).
 */
size_t windrow_variants_shared(const uint8_t *key, size_t key_bytes, uint8_t *out, unsigned *features);

/* Counts one pair of a page and the page that stands for it. */
void windrow_variants_count(struct windrow_variant_counts *counts, unsigned from_features, unsigned to_features);

/* Finds all variants in a finished store.
 *
 * scratch       an existing directory for sort runs; what is put there is removed again
 * memory_bytes  roughly what sorting may take, at least a few MiB
 * out_path      receives the lines FROM TAB TO, in host order of FROM; NULL: only count
 * meter         counts pages as they are hashed; may be NULL
 *
 * WINDROW_DAMAGED, WINDROW_RESOURCE, WINDROW_STOPPED (nothing is kept: it begins again).
 */
enum windrow_status windrow_variants_find(const struct windrow_store *store, const char *scratch, uint64_t memory_bytes, const char *out_path,
                                          struct windrow_variant_counts *counts, struct windrow_meter *meter);

#endif
