/* alias: pages that are other pages under another name (redirects, declared canonical pages), out of core.
 *
 * An alias file holds FROM TAB TO lines in the shape of a dump, compressed or not. Chains are followed to
 * their end; a cycle is cut at its smallest URL in host order, which all of its members then stand for.
 * If one FROM has several TOs, the smallest TO counts, so that the order of lines does not matter. A line
 * whose FROM and TO are the same page says nothing.
 *
 * The file is turned once into a table on disk, scratch/aliases: records (shard/records.h) of a FROM and
 * what it finally stands for, in host order; no TO of the table is a FROM of it. Batches are folded by reading
 * it front to back beside their sorted keys, so no alias is ever kept in memory or looked up at random.
 */
#ifndef WINDROW_SHARD_ALIAS_H
#define WINDROW_SHARD_ALIAS_H

#include "base/meter.h"
#include "store/store.h"

/* A ledger may hold these. */
struct windrow_alias_facts {
    uint64_t count;       /* keys that stand for another */
    uint64_t to_bytes;    /* of what they stand for, all together */
    uint64_t bad_lines;   /* lines without two usable URLs, left out */
    uint64_t cycles;
};

/* Turns an alias file into scratch/aliases, durable but for its name. A job that was killed meanwhile begins again.
 *
 * memory_bytes   what it may take (with some 2 MiB for buffers)
 * meter          counts lines; may be NULL
 *
 * WINDROW_INPUT for an unreadable file; WINDROW_STOPPED when the meter says so.
 * Method: every key carries its jump, a later member of its chain, and the smallest key on the way; in each round all jumps are
 * doubled by sorting keys by their jumps and reading the table beside them (pointer jumping, Wyllie 1979). Only keys
 * whose TO is a FROM take part, so the rounds are few and small for real redirects.
 */
enum windrow_status windrow_alias_build(const char *file, const char *scratch, uint64_t memory_bytes, struct windrow_meter *meter,
                                        struct windrow_alias_facts *facts);

/* The table's path; the caller frees it. NULL when memory is out. */
char *windrow_alias_path(const char *scratch);

/* Writes the store's own table of folded URLs (aliases.zst, alias-index and alias-keys, see FORMAT.md) from scratch/aliases:
 * those whose page is in the store, with its id. `store` is open and lacks them; store_path is its directory. */
enum windrow_status windrow_alias_write(const char *scratch, const struct windrow_store *store, const char *store_path, uint64_t memory_bytes);

#endif
