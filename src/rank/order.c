#include "rank/order_layout.h"

#include <stdlib.h>
#include <string.h>
#include <xxhash.h>

struct windrow_order {
    struct windrow_map map;
    struct windrow_order_header header;
    struct windrow_order_layout layout;
    char *path;
    const uint32_t *ids_narrow; /* one of the two is set */
    const uint64_t *ids_wide;
    const double *scores;
    const double *samples;
};

enum windrow_status windrow_order_open(const char *path, uint64_t pages, struct windrow_order **out)
{
    *out = NULL;
    struct windrow_order *order = calloc(1, sizeof *order);
    char *path_copy = strdup(path);
    if (!order || !path_copy) {
        free(order);
        free(path_copy);
        return windrow_fail(WINDROW_RESOURCE, "out of memory while opening %s", path);
    }
    order->path = path_copy;
    order->map.descriptor = -1;
    enum windrow_status status = windrow_map_open(&order->map, path);
    if (status)
        goto out;
    if (order->map.bytes < WINDROW_ORDER_HEADER_BYTES) {
        status = windrow_fail(WINDROW_DAMAGED, "%s is cut short: it ends at byte %llu, inside its header", path,
                              (unsigned long long)order->map.bytes);
        goto out;
    }
    const struct windrow_order_header *header = &order->header;
    memcpy(&order->header, order->map.data, sizeof order->header);
    order->layout = windrow_order_layout_of(pages);
    if (memcmp(header->magic, WINDROW_ORDER_MAGIC, sizeof header->magic) || header->checksum != XXH3_64bits(header, offsetof(struct windrow_order_header, checksum)))
        status = windrow_fail(WINDROW_DAMAGED, "%s: its header is damaged, or it is not an order at all", path);
    else if (header->version != WINDROW_ORDER_VERSION)
        status = windrow_fail(WINDROW_DAMAGED, "%s has version %u, this program reads version %d", path, header->version, WINDROW_ORDER_VERSION);
    else if (header->pages != pages || header->id_bytes != order->layout.id_bytes || header->stride != WINDROW_ORDER_STRIDE)
        status = windrow_fail(WINDROW_DAMAGED, "%s orders %llu pages, but there are %llu", path,
                              (unsigned long long)header->pages, (unsigned long long)pages);
    else if (order->map.bytes != order->layout.file_bytes)
        status = windrow_fail(WINDROW_DAMAGED, "%s has %llu bytes where %llu were written", path,
                              (unsigned long long)order->map.bytes, (unsigned long long)order->layout.file_bytes);
    if (status)
        goto out;
    if (order->layout.id_bytes == 4)
        order->ids_narrow = (const uint32_t *)(order->map.data + WINDROW_ORDER_HEADER_BYTES);
    else
        order->ids_wide = (const uint64_t *)(order->map.data + WINDROW_ORDER_HEADER_BYTES);
    order->scores = (const double *)(order->map.data + order->layout.scores_offset);
    order->samples = (const double *)(order->map.data + order->layout.samples_offset);
    *out = order;
out:
    if (status)
        windrow_order_close(order);
    return status;
}

void windrow_order_close(struct windrow_order *order)
{
    if (!order)
        return;
    windrow_map_close(&order->map);
    free(order->path);
    free(order);
}

uint64_t windrow_order_pages(const struct windrow_order *order)
{
    return order->header.pages;
}

static uint64_t id_at(const struct windrow_order *order, uint64_t index)
{
    return order->ids_narrow ? order->ids_narrow[index] : order->ids_wide[index];
}

uint64_t windrow_order_page(const struct windrow_order *order, uint64_t place)
{
    return id_at(order, place - 1);
}

double windrow_order_score(const struct windrow_order *order, uint64_t place)
{
    return order->scores[place - 1];
}

/* The first index in [first, end) whose score does not belong, `end` when all do. */
static uint64_t bisect(const double *scores, uint64_t first, uint64_t end, windrow_order_belongs belongs, const void *context)
{
    while (first < end) {
        uint64_t middle = first + (end - first) / 2;
        if (belongs(context, scores[middle]))
            first = middle + 1;
        else
            end = middle;
    }
    return first;
}

uint64_t windrow_order_count(const struct windrow_order *order, windrow_order_belongs belongs, const void *context, uint64_t near_place)
{
    uint64_t pages = order->header.pages;
    if (!pages)
        return 0;
    /* Strides that double, away from the start, until the end of what belongs is enclosed. */
    uint64_t index = near_place - 1, first = 0, end = pages, step = 1;
    if (belongs(context, order->scores[index])) {
        first = index + 1;
        while (first < pages && step <= WINDROW_ORDER_STRIDE) {
            uint64_t probe = pages - first > step ? first + step - 1 : pages - 1;
            if (!belongs(context, order->scores[probe])) {
                end = probe;
                break;
            }
            first = probe + 1;
            step *= 2;
        }
    } else {
        end = index;
        while (end > 0 && step <= WINDROW_ORDER_STRIDE) {
            uint64_t probe = end > step ? end - step : 0;
            if (belongs(context, order->scores[probe])) {
                first = probe + 1;
                break;
            }
            end = probe;
            step *= 2;
        }
    }
    if (end - first > WINDROW_ORDER_STRIDE) {
        /* Samples first: the one that fails bounds the end from above, the last that belongs from below. */
        uint64_t low = (first + WINDROW_ORDER_STRIDE - 1) / WINDROW_ORDER_STRIDE;
        uint64_t high = (end + WINDROW_ORDER_STRIDE - 1) / WINDROW_ORDER_STRIDE;
        uint64_t sample = bisect(order->samples, low, high, belongs, context);
        if (sample < high && sample * WINDROW_ORDER_STRIDE < end)
            end = sample * WINDROW_ORDER_STRIDE;
        if (sample > low)
            first = (sample - 1) * WINDROW_ORDER_STRIDE + 1;
    }
    return bisect(order->scores, first, end, belongs, context);
}

static bool is_above(const void *context, double score)
{
    return score > *(const double *)context;
}

static bool is_reaching(const void *context, double score)
{
    return score >= *(const double *)context;
}

uint64_t windrow_order_above(const struct windrow_order *order, double score)
{
    return windrow_order_count(order, is_above, &score, order->header.pages / 2 + 1);
}

uint64_t windrow_order_reaching(const struct windrow_order *order, double score)
{
    return windrow_order_count(order, is_reaching, &score, order->header.pages / 2 + 1);
}

uint64_t windrow_order_place(const struct windrow_order *order, double score, uint64_t page)
{
    uint64_t first = windrow_order_above(order, score);
    if (first == order->header.pages)
        return 0;
    uint64_t ties_end = windrow_order_count(order, is_reaching, &score, first + 1), end = ties_end;
    while (first < end) {
        uint64_t middle = first + (end - first) / 2;
        if (id_at(order, middle) < page)
            first = middle + 1;
        else
            end = middle;
    }
    return first < ties_end && id_at(order, first) == page ? first + 1 : 0;
}

enum windrow_status windrow_order_verify(const struct windrow_order *order, const double *scores)
{
    const struct windrow_order_header *header = &order->header;
    const struct windrow_order_layout *layout = &order->layout;
    uint64_t pages = header->pages;
    if (header->ids_checksum != XXH3_64bits(order->map.data + WINDROW_ORDER_HEADER_BYTES, pages * layout->id_bytes))
        return windrow_fail(WINDROW_DAMAGED, "%s: the checksum of its page ids is wrong", order->path);
    if (header->scores_checksum != XXH3_64bits(order->scores, pages * sizeof(double)))
        return windrow_fail(WINDROW_DAMAGED, "%s: the checksum of its scores is wrong", order->path);
    if (header->samples_checksum != XXH3_64bits(order->samples, layout->sample_count * sizeof(double)))
        return windrow_fail(WINDROW_DAMAGED, "%s: the checksum of its samples is wrong", order->path);
    /* Pairs that rise strictly are distinct; as each page has one score, so are the pages: all are there. */
    for (uint64_t index = 0; index < pages; index++) {
        uint64_t page = id_at(order, index);
        unsigned long long place = index + 1;
        if (page >= pages)
            return windrow_fail(WINDROW_DAMAGED, "%s: place %llu holds page %llu of %llu", order->path, place,
                                (unsigned long long)page, (unsigned long long)pages);
        if (order->scores[index] != scores[page])
            return windrow_fail(WINDROW_DAMAGED, "%s: the score at place %llu is not that of its page %llu", order->path, place,
                                (unsigned long long)page);
        if (index && !(order->scores[index - 1] > order->scores[index] ||
                       (order->scores[index - 1] == order->scores[index] && id_at(order, index - 1) < page)))
            return windrow_fail(WINDROW_DAMAGED, "%s: places %llu and %llu are in the wrong order", order->path, place - 1, place);
        if (index % WINDROW_ORDER_STRIDE == 0 && order->samples[index / WINDROW_ORDER_STRIDE] != order->scores[index])
            return windrow_fail(WINDROW_DAMAGED, "%s: the sample of place %llu is wrong", order->path, place);
    }
    return WINDROW_OK;
}
