/* names: what the numbers of a dump of ids stand for, out of core.
 *
 * A names file holds ID TAB NAME lines, in any order and with gaps, compressed or not; further fields are not
 * looked at, and white space will do for the TAB. Ids are whole numbers below 2^64. A name with "://" in it is
 * a URL; any other is a host name and stands for the page http://HOST/. If one id has several names, the
 * smallest in host order counts.
 *
 * Published host graphs often write host names with their labels reversed ("example.north.www"). Whether a
 * file does is found from its first 1,000 host names of at least two labels (as far as they lie in its first
 * 4 MiB), IP addresses left out: if more of them end with a label that the Public Suffix List knows as a top-level domain than begin with one, they
 * are as usual; if more begin with one, they are reversed. If that says nothing (".example" is in no
 * list), they are reversed if they have fewer different first labels than last ones: top-level domains are few.
 *
 * The file is turned once into scratch/names: records (shard/records.h) of an id's key (0x00, then the id,
 * most significant byte first) and the page key that it stands for, in the order of ids. The value
 * of a URL that is neither http nor https is empty. No page key begins with 0x00, so ids and pages may stand in one
 * batch, and are told apart by their first byte.
 */
#ifndef WINDROW_SHARD_NAMES_H
#define WINDROW_SHARD_NAMES_H

#include "base/meter.h"

#include <stddef.h>

/* A ledger may hold these. */
struct windrow_names_facts {
    uint64_t count;       /* ids with a name */
    uint64_t key_bytes;   /* of what they stand for, all together */
    uint64_t bad_lines;   /* lines without an id and a usable name, left out */
    uint64_t reversed;    /* 1: host names were reversed */
};

/* Turns a names file into scratch/names, durable but for its name. memory_bytes: what it may take (with some 2 MiB for
 * buffers). meter: counts lines; may be NULL. WINDROW_INPUT for an unreadable file; WINDROW_STOPPED when the meter says so. */
enum windrow_status windrow_names_build(const char *file, const char *scratch, uint64_t memory_bytes, struct windrow_meter *meter,
                                        struct windrow_names_facts *facts);

/* The table's path; the caller frees it. NULL when memory is out. */
char *windrow_names_path(const char *scratch);

#define WINDROW_NAMES_KEY_BYTES 9

/* The key of an id, and back. */
void windrow_names_key(uint64_t id, char key[WINDROW_NAMES_KEY_BYTES]);
uint64_t windrow_names_id(const char key[WINDROW_NAMES_KEY_BYTES]);
static inline bool windrow_names_is_id(const char *key)
{
    return key[0] == 0;
}

/* Reads a whole number below 2^64, digits only. False when it is none. */
bool windrow_names_number(const char *text, size_t bytes, uint64_t *number);

#endif
