#include "shard/alias.h"

#include "dump/reader.h"
#include "shard/sort.h"
#include "url/keyer.h"

#include <stdlib.h>
#include <string.h>
#include <xxhash.h>

#define NONE UINT32_MAX

struct node {
    uint64_t key_at;
    uint32_t key_bytes;
    uint32_t to;          /* node that it stands for; NONE: itself */
};

struct windrow_alias {
    struct windrow_buffer keys;
    struct node *nodes;
    uint32_t node_count, node_capacity;
    uint32_t *slots;      /* node + 1; 0: free */
    size_t slot_count;
    uint32_t *sorted;     /* folded nodes in host order */
    uint32_t folded_count;
};

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory for the aliases");
}

static const char *node_key(const struct windrow_alias *alias, uint32_t node)
{
    return (const char *)alias->keys.data + alias->nodes[node].key_at;
}

static int node_order(const struct windrow_alias *alias, uint32_t a, uint32_t b)
{
    return windrow_key_compare(node_key(alias, a), alias->nodes[a].key_bytes, node_key(alias, b), alias->nodes[b].key_bytes);
}

static uint32_t find(const struct windrow_alias *alias, const char *key, size_t key_bytes, size_t *slot)
{
    size_t at = XXH3_64bits(key, key_bytes) & (alias->slot_count - 1);
    for (; alias->slots[at]; at = (at + 1) & (alias->slot_count - 1)) {
        uint32_t node = alias->slots[at] - 1;
        if (alias->nodes[node].key_bytes == key_bytes && memcmp(node_key(alias, node), key, key_bytes) == 0)
            return node;
    }
    *slot = at;
    return NONE;
}

static enum windrow_status grow_slots(struct windrow_alias *alias)
{
    size_t count = alias->slot_count ? 2 * alias->slot_count : 1024;
    uint32_t *slots = calloc(count, sizeof *slots);
    if (!slots)
        return memory();
    free(alias->slots);
    alias->slots = slots;
    alias->slot_count = count;
    for (uint32_t node = 0; node < alias->node_count; node++) {
        size_t slot;
        find(alias, node_key(alias, node), alias->nodes[node].key_bytes, &slot);
        alias->slots[slot] = node + 1;
    }
    return WINDROW_OK;
}

static enum windrow_status add(struct windrow_alias *alias, const char *key, size_t key_bytes, uint32_t *out)
{
    enum windrow_status status;
    if (alias->node_count >= alias->slot_count / 2 && (status = grow_slots(alias)))
        return status;
    size_t slot;
    if ((*out = find(alias, key, key_bytes, &slot)) != NONE)
        return WINDROW_OK;
    if (alias->node_count == alias->node_capacity) {
        uint32_t capacity = alias->node_capacity ? 2 * alias->node_capacity : 256;
        struct node *nodes = capacity < NONE / 2 ? realloc(alias->nodes, capacity * sizeof *nodes) : NULL;
        if (!nodes)
            return memory();
        alias->nodes = nodes;
        alias->node_capacity = capacity;
    }
    alias->nodes[alias->node_count] = (struct node){alias->keys.bytes, (uint32_t)key_bytes, NONE};
    if ((status = windrow_buffer_append(&alias->keys, key, key_bytes)))
        return status;
    alias->slots[slot] = ++alias->node_count;
    *out = alias->node_count - 1;
    return WINDROW_OK;
}

/* Follows every chain to its end. Each node's link is followed at most twice: nodes under way are marked, so that
 * a chain that comes back to one is a cycle, whose smallest member becomes its end. */
static enum windrow_status resolve(struct windrow_alias *alias)
{
    uint32_t *path = malloc((alias->node_count + 1u) * sizeof *path);
    uint8_t *state = calloc(alias->node_count + 1u, 1); /* 1: under way, 2: done */
    if (!path || !state) {
        free(path);
        free(state);
        return memory();
    }
    for (uint32_t start = 0; start < alias->node_count; start++) {
        uint32_t length = 0, node = start;
        while (node != NONE && state[node] == 0) {
            state[node] = 1;
            path[length++] = node;
            node = alias->nodes[node].to;
        }
        uint32_t end;
        if (node == NONE) {
            end = path[length - 1];
        } else if (state[node] == 2) {
            end = alias->nodes[node].to == NONE ? node : alias->nodes[node].to;
        } else {
            uint32_t first = length;
            end = node;
            do {
                first--;
                if (node_order(alias, path[first], end) < 0)
                    end = path[first];
            } while (path[first] != node);
        }
        for (uint32_t index = 0; index < length; index++) {
            alias->nodes[path[index]].to = path[index] == end ? NONE : end;
            state[path[index]] = 2;
        }
    }
    free(path);
    free(state);
    return WINDROW_OK;
}

static const uint8_t *sort_key(const void *context, uint32_t node)
{
    return (const uint8_t *)node_key(context, node);
}

static enum windrow_status sort(struct windrow_alias *alias)
{
    struct windrow_sort_item *items = malloc((alias->node_count + 1u) * sizeof *items);
    alias->sorted = malloc((alias->node_count + 1u) * sizeof *alias->sorted);
    if (!items || !alias->sorted) {
        free(items);
        return memory();
    }
    for (uint32_t node = 0; node < alias->node_count; node++)
        if (alias->nodes[node].to != NONE)
            items[alias->folded_count++] = (struct windrow_sort_item){0, node, alias->nodes[node].key_bytes};
    windrow_sort_keys(items, alias->folded_count, sort_key, alias);
    for (uint32_t index = 0; index < alias->folded_count; index++)
        alias->sorted[index] = items[index].reference;
    free(items);
    return WINDROW_OK;
}

static enum windrow_status take_line(struct windrow_alias *alias, struct windrow_keyer *keyer, struct windrow_dump_line *line, struct windrow_buffer *from,
                                     uint64_t *bad_lines)
{
    enum windrow_status status;
    struct windrow_dump_target target;
    const char *key;
    size_t key_bytes;
    if (line->malformed || windrow_keyer_key(keyer, line->source, line->source_bytes, &key, &key_bytes) != WINDROW_URL_OK ||
        !windrow_dump_line_target(line, &target)) {
        (*bad_lines)++;
        return WINDROW_OK;
    }
    from->bytes = 0;
    if ((status = windrow_buffer_append(from, key, key_bytes)))
        return status;
    if (windrow_keyer_key(keyer, target.text, target.bytes, &key, &key_bytes) != WINDROW_URL_OK) {
        (*bad_lines)++;
        return WINDROW_OK;
    }
    uint32_t a, b;
    if ((status = add(alias, (char *)from->data, from->bytes, &a)) || (status = add(alias, key, key_bytes, &b)))
        return status;
    if (a != b && (alias->nodes[a].to == NONE || node_order(alias, b, alias->nodes[a].to) < 0))
        alias->nodes[a].to = b;
    return WINDROW_OK;
}

enum windrow_status windrow_alias_load(const char *path, struct windrow_alias **out, uint64_t *bad_lines)
{
    *out = NULL;
    *bad_lines = 0;
    struct windrow_dump *dump = NULL;
    struct windrow_dump_chunk chunk = {0};
    struct windrow_keyer *keyer = NULL;
    struct windrow_buffer from = {0};
    struct windrow_alias *alias = calloc(1, sizeof *alias);
    const char *const paths[] = {path};
    struct windrow_dump_options options = {.paths = paths, .path_count = 1, .shape = WINDROW_DUMP_LISTS};
    enum windrow_status status = alias ? WINDROW_OK : memory();
    if (status || (status = grow_slots(alias)) || (status = windrow_keyer_create(&keyer)) || (status = windrow_dump_open(&options, NULL, &dump)))
        goto out;
    for (;;) {
        if ((status = windrow_dump_read(dump, &chunk)))
            goto out;
        if (!chunk.bytes)
            break;
        struct windrow_dump_lines lines;
        struct windrow_dump_line line;
        windrow_dump_lines_begin(&lines, &chunk);
        while (windrow_dump_lines_next(&lines, &line))
            if ((status = take_line(alias, keyer, &line, &from, bad_lines)))
                goto out;
    }
    if ((status = resolve(alias)))
        goto out;
    status = sort(alias);
out:
    windrow_dump_chunk_free(&chunk);
    windrow_dump_close(dump);
    windrow_keyer_destroy(keyer);
    windrow_buffer_free(&from);
    if (status) {
        windrow_alias_free(alias);
        return windrow_fail_within(status, "reading the aliases");
    }
    *out = alias;
    return WINDROW_OK;
}

void windrow_alias_free(struct windrow_alias *alias)
{
    if (!alias)
        return;
    windrow_buffer_free(&alias->keys);
    free(alias->nodes);
    free(alias->slots);
    free(alias->sorted);
    free(alias);
}

bool windrow_alias_find(const struct windrow_alias *alias, const char *key, size_t key_bytes, const char **folded, size_t *folded_bytes)
{
    size_t slot;
    uint32_t node = find(alias, key, key_bytes, &slot);
    if (node == NONE || alias->nodes[node].to == NONE)
        return false;
    *folded = node_key(alias, alias->nodes[node].to);
    *folded_bytes = alias->nodes[alias->nodes[node].to].key_bytes;
    return true;
}

uint64_t windrow_alias_count(const struct windrow_alias *alias)
{
    return alias->folded_count;
}

void windrow_alias_at(const struct windrow_alias *alias, uint64_t position, const char **key, size_t *key_bytes, const char **folded,
                      size_t *folded_bytes)
{
    uint32_t node = alias->sorted[position], to = alias->nodes[node].to;
    *key = node_key(alias, node);
    *key_bytes = alias->nodes[node].key_bytes;
    *folded = node_key(alias, to);
    *folded_bytes = alias->nodes[to].key_bytes;
}

uint64_t windrow_alias_fingerprint(const struct windrow_alias *alias)
{
    uint64_t sum = 0;
    for (uint32_t index = 0; index < alias->folded_count; index++) {
        const char *texts[2];
        size_t bytes[2];
        windrow_alias_at(alias, index, &texts[0], &bytes[0], &texts[1], &bytes[1]);
        sum = XXH3_64bits_withSeed(texts[0], bytes[0], sum);
        sum = XXH3_64bits_withSeed(texts[1], bytes[1], sum);
    }
    return sum;
}
