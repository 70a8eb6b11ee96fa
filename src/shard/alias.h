/* alias: pages that are other pages under another name (redirects, declared canonical pages).
 *
 * An alias file holds FROM TAB TO lines in the shape of a dump. Chains are followed to their end; a cycle
 * is cut at its smallest URL in host order, which all of its members then stand for. If one FROM has
 * several TOs, the smallest TO counts, so that the order of lines does not matter. Kept in memory.
 *
 * Threads: after loading, windrow_alias_find() may be called from any thread.
 */
#ifndef WINDROW_SHARD_ALIAS_H
#define WINDROW_SHARD_ALIAS_H

#include "base/file.h"

struct windrow_alias;

/* Reads an alias file. *bad_lines counts lines without two usable URLs, which are left out. */
enum windrow_status windrow_alias_load(const char *path, struct windrow_alias **alias, uint64_t *bad_lines);
void windrow_alias_free(struct windrow_alias *alias); /* NULL is fine */

/* The key that a key is folded into; false when it stands for itself. The answer lives as long as `alias`. */
bool windrow_alias_find(const struct windrow_alias *alias, const char *key, size_t key_bytes, const char **folded, size_t *folded_bytes);

/* Number of folded keys, and the one at a position in host order with what it is folded into. */
uint64_t windrow_alias_count(const struct windrow_alias *alias);
void windrow_alias_at(const struct windrow_alias *alias, uint64_t position, const char **key, size_t *key_bytes, const char **folded,
                      size_t *folded_bytes);

/* XXH3-64 of all folded keys and what they are folded into: two files that say the same have the same. */
uint64_t windrow_alias_fingerprint(const struct windrow_alias *alias);

#endif
