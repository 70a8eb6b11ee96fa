/* delivery: hands rows to their taker with their URLs.
 *
 * Rows come in the order of the answer, URLs are kept in host order in compressed frames. So rows are
 * collected, their URLs read in host order, each frame once, and then handed on in the answer's order.
 * Memory is bounded however long the URLs are. One object, one thread.
 */
#ifndef WINDROW_ANSWER_DELIVERY_H
#define WINDROW_ANSWER_DELIVERY_H

#include "base/file.h"
#include "store/store.h"

struct windrow_delivery {
    struct windrow_page_reader *reader;
    windrow_taker taker;
    void *context;
    struct windrow_buffer rows;
    struct windrow_buffer text;
};

void windrow_delivery_begin(struct windrow_delivery *delivery, struct windrow_page_reader *reader, windrow_taker taker, void *context);
/* Adds a row, but for its URL. Its group's name must stay valid until the end. May hand rows on. */
enum windrow_status windrow_delivery_add(struct windrow_delivery *delivery, uint64_t page, const struct windrow_row *row);
/* Hands on what is left. */
enum windrow_status windrow_delivery_end(struct windrow_delivery *delivery);
void windrow_delivery_free(struct windrow_delivery *delivery);

#endif
