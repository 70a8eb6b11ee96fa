#include "shard/sort.h"

#include <string.h>

#define SMALL 12

struct sorter {
    windrow_sort_key key;
    const void *context;
};

/* Eight key bytes from `depth` on, big-endian, so that integer order is byte order; zeros behind the end.
 * A key that ends is told from one that goes on with zero bytes by its length, see compare_rest(). */
static uint64_t load(const struct sorter *sorter, const struct windrow_sort_item *item, size_t depth)
{
    const uint8_t *key = sorter->key(sorter->context, item->reference);
    uint64_t word = 0;
    if (item->key_bytes >= depth + 8) {
        memcpy(&word, key + depth, 8);
        return __builtin_bswap64(word);
    }
    for (size_t at = depth; at < depth + 8; at++)
        word = word << 8 | (at < item->key_bytes ? key[at] : 0);
    return word;
}

static int compare_rest(const struct sorter *sorter, const struct windrow_sort_item *a, const struct windrow_sort_item *b, size_t depth)
{
    if (a->cache != b->cache)
        return a->cache < b->cache ? -1 : 1;
    size_t shorter = a->key_bytes < b->key_bytes ? a->key_bytes : b->key_bytes;
    int order = 0;
    if (shorter > depth)
        order = memcmp(sorter->key(sorter->context, a->reference) + depth,
                       sorter->key(sorter->context, b->reference) + depth, shorter - depth);
    if (order)
        return order;
    return a->key_bytes < b->key_bytes ? -1 : a->key_bytes > b->key_bytes;
}

static void insertion(const struct sorter *sorter, struct windrow_sort_item *items, size_t count, size_t depth)
{
    for (size_t index = 1; index < count; index++) {
        struct windrow_sort_item item = items[index];
        size_t at = index;
        while (at > 0 && compare_rest(sorter, &item, &items[at - 1], depth) < 0) {
            items[at] = items[at - 1];
            at--;
        }
        items[at] = item;
    }
}

static void swap(struct windrow_sort_item *a, struct windrow_sort_item *b)
{
    struct windrow_sort_item kept = *a;
    *a = *b;
    *b = kept;
}

static uint64_t middle(uint64_t a, uint64_t b, uint64_t c)
{
    if (a > b) {
        uint64_t kept = a;
        a = b;
        b = kept;
    }
    return c < a ? a : c > b ? b : c;
}

static void quicksort(const struct sorter *sorter, struct windrow_sort_item *items, size_t count, size_t depth);

/* The items share the eight bytes at `depth`: those whose key ends within them come first, the shorter
 * the earlier (their zeros were padding or equal bytes), the others are sorted by the next eight. */
static void deepen(const struct sorter *sorter, struct windrow_sort_item *items, size_t count, size_t depth)
{
    size_t ended = 0;
    for (size_t index = 0; index < count; index++)
        if (items[index].key_bytes <= depth + 8)
            swap(&items[index], &items[ended++]);
    for (size_t index = 1; index < ended; index++) {
        struct windrow_sort_item item = items[index];
        size_t at = index;
        while (at > 0 && item.key_bytes < items[at - 1].key_bytes) {
            items[at] = items[at - 1];
            at--;
        }
        items[at] = item;
    }
    items += ended;
    count -= ended;
    for (size_t index = 0; index < count; index++) {
        if (index + 8 < count)
            __builtin_prefetch(sorter->key(sorter->context, items[index + 8].reference) + depth + 8);
        items[index].cache = load(sorter, &items[index], depth + 8);
    }
    quicksort(sorter, items, count, depth + 8);
}

static void quicksort(const struct sorter *sorter, struct windrow_sort_item *items, size_t count, size_t depth)
{
    while (count > SMALL) {
        uint64_t pivot = middle(items[0].cache, items[count / 2].cache, items[count - 1].cache);
        if (count > 1000)
            pivot = middle(pivot, middle(items[count / 8].cache, items[count / 4].cache, items[3 * (count / 8)].cache),
                           middle(items[5 * (count / 8)].cache, items[3 * (count / 4)].cache, items[7 * (count / 8)].cache));
        size_t below = 0, at = 0, above = count;
        while (at < above) {
            if (items[at].cache < pivot)
                swap(&items[at++], &items[below++]);
            else if (items[at].cache > pivot)
                swap(&items[at], &items[--above]);
            else
                at++;
        }
        deepen(sorter, items + below, above - below, depth);
        /* The smaller side by recursion, the larger one by the loop: the stack stays shallow. */
        if (below < count - above) {
            quicksort(sorter, items, below, depth);
            items += above;
            count -= above;
        } else {
            quicksort(sorter, items + above, count - above, depth);
            count = below;
        }
    }
    insertion(sorter, items, count, depth);
}

void windrow_sort_keys(struct windrow_sort_item *items, size_t count, windrow_sort_key key, const void *context)
{
    const struct sorter sorter = {key, context};
    for (size_t index = 0; index < count; index++)
        items[index].cache = load(&sorter, &items[index], 0);
    quicksort(&sorter, items, count, 0);
}
