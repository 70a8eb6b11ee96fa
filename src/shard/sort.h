/* sort: puts a batch's page keys in host order.
 *
 * Multikey quicksort (Bentley & Sedgewick 1997) on eight key bytes at a time, which are cached beside
 * the reference, so that most comparisons touch no key: keys of one host share long prefixes, and a
 * plain comparison sort would read them again and again.
 */
#ifndef WINDROW_SHARD_SORT_H
#define WINDROW_SHARD_SORT_H

#include <stddef.h>
#include <stdint.h>

struct windrow_sort_item {
    uint64_t cache;       /* scratch of the sort */
    uint32_t reference;   /* what the caller knows the key by */
    uint32_t key_bytes;
};

/* Where the key of a reference is. It must stay valid during the sort. */
typedef const uint8_t *(*windrow_sort_key)(const void *context, uint32_t reference);

/* Sorts the items by memcmp order of their keys, a prefix before what it is a prefix of. Equal keys
 * keep no particular order. Recursion is bounded by the logarithm of `count` and the key length. */
void windrow_sort_keys(struct windrow_sort_item *items, size_t count, windrow_sort_key key, const void *context);

#endif
