/* drop: pages and hosts that are to be left out of a store (takedowns), in memory.
 *
 * A file holds a URL or a host a line, compressed or not. A URL leaves out that page; a host (a line without
 * "://") all pages of that host, whatever their scheme and port, but none of its subdomains. A line that is
 * neither is an error: a takedown must not be forgotten silently. Fields behind a TAB are not looked at.
 *
 * Threads: after loading, all functions may be called from any thread.
 */
#ifndef WINDROW_SHARD_DROP_H
#define WINDROW_SHARD_DROP_H

#include "base/error.h"

#include <stddef.h>

struct windrow_drop_set;

/* Reads a file. WINDROW_INPUT, naming file and line, when it cannot be read or understood. *drop is NULL on failure. */
enum windrow_status windrow_drop_load(const char *path, struct windrow_drop_set **drop);
void windrow_drop_free(struct windrow_drop_set *drop); /* NULL is fine */

/* True when the page of a key (url/key.h) is to be left out. NULL leaves nothing out. */
bool windrow_drop_has(const struct windrow_drop_set *drop, const char *key, size_t key_bytes);

/* Pages and hosts that were named. */
size_t windrow_drop_count(const struct windrow_drop_set *drop);
/* Memory that it takes. */
uint64_t windrow_drop_memory_bytes(const struct windrow_drop_set *drop);
/* Equal for files that leave out the same, whatever the order of their lines; 0 for NULL. */
uint64_t windrow_drop_fingerprint(const struct windrow_drop_set *drop);

#endif
