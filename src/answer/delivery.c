#include "answer/delivery.h"

#include <stdlib.h>

enum {
    ROWS_MOST = 65536,
    TEXT_BYTES_MOST = 32 * 1024 * 1024 /* some 400 bytes a row: reached by crawls of very long URLs only */
};

struct pending {
    uint64_t page;
    size_t answer_position;
    size_t text_offset;
    struct windrow_row row;
};

static int compare_by_page(const void *left, const void *right)
{
    const struct pending *a = left, *b = right;
    return (a->page > b->page) - (a->page < b->page);
}

static int compare_by_answer(const void *left, const void *right)
{
    const struct pending *a = left, *b = right;
    return (a->answer_position > b->answer_position) - (a->answer_position < b->answer_position);
}

/* Reads the URLs of the rows, which are left in page order. *full: the text grew too long before the end. */
static enum windrow_status read_urls(struct windrow_delivery *delivery, struct pending *rows, size_t count, bool *full)
{
    *full = false;
    delivery->text.bytes = 0;
    qsort(rows, count, sizeof *rows, compare_by_page);
    for (size_t i = 0; i < count; i++) {
        const char *url;
        enum windrow_status status = windrow_page_reader_url(delivery->reader, rows[i].page, &url, &rows[i].row.url_bytes);
        if (status)
            return status;
        rows[i].text_offset = delivery->text.bytes;
        if ((status = windrow_buffer_append(&delivery->text, url, rows[i].row.url_bytes)))
            return status;
        if (delivery->text.bytes > TEXT_BYTES_MOST && count > 1) {
            *full = true;
            break;
        }
    }
    return WINDROW_OK;
}

static enum windrow_status hand_on(struct windrow_delivery *delivery, struct pending *rows, size_t count)
{
    bool full;
    enum windrow_status status = read_urls(delivery, rows, count, &full);
    if (status)
        return status;
    qsort(rows, count, sizeof *rows, compare_by_answer);
    if (full) {
        size_t half = count / 2;
        status = hand_on(delivery, rows, half);
        return status ? status : hand_on(delivery, rows + half, count - half);
    }
    for (size_t i = 0; i < count && !status; i++) {
        rows[i].row.url = (const char *)delivery->text.data + rows[i].text_offset;
        status = delivery->taker(delivery->context, &rows[i].row);
    }
    return status;
}

void windrow_delivery_begin(struct windrow_delivery *delivery, struct windrow_page_reader *reader, windrow_taker taker, void *context)
{
    *delivery = (struct windrow_delivery){.reader = reader, .taker = taker, .context = context};
}

enum windrow_status windrow_delivery_add(struct windrow_delivery *delivery, uint64_t page, const struct windrow_row *row)
{
    struct pending pending = {.page = page, .answer_position = delivery->rows.bytes / sizeof pending, .row = *row};
    enum windrow_status status = windrow_buffer_append(&delivery->rows, &pending, sizeof pending);
    if (status || delivery->rows.bytes < ROWS_MOST * sizeof pending)
        return status;
    return windrow_delivery_end(delivery);
}

enum windrow_status windrow_delivery_end(struct windrow_delivery *delivery)
{
    size_t count = delivery->rows.bytes / sizeof(struct pending);
    enum windrow_status status = count ? hand_on(delivery, (struct pending *)delivery->rows.data, count) : WINDROW_OK;
    delivery->rows.bytes = 0;
    return status;
}

void windrow_delivery_free(struct windrow_delivery *delivery)
{
    windrow_buffer_free(&delivery->rows);
    windrow_buffer_free(&delivery->text);
}
