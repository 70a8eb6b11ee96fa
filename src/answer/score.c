/* Scores and places in the crawl: of one page, of all pages in host order. */
#include "answer/ranking.h"

static enum windrow_status fill_row(struct windrow_ranking *ranking, uint64_t page, struct windrow_row *row)
{
    uint64_t place;
    struct windrow_range range;
    enum windrow_status status = windrow_place_find(ranking->order, &ranking->bounds, &ranking->memory, ranking->scores[page], page, &place, &range);
    if (status)
        return status;
    *row = windrow_ranking_row(ranking, ranking->scores[page], range);
    row->place = place;
    return windrow_page_reader_url(ranking->reader, page, &row->url, &row->url_bytes);
}

enum windrow_status windrow_ranking_score(struct windrow_ranking *ranking, const char *url, size_t url_bytes,
                                          struct windrow_row *row, bool *folded)
{
    uint64_t page;
    bool is_folded = false;
    enum windrow_status status = windrow_page_reader_find(ranking->reader, url, url_bytes, &page, &is_folded);
    if (status)
        return status;
    if (folded)
        *folded = is_folded;
    return fill_row(ranking, page, row);
}

enum windrow_status windrow_ranking_all(struct windrow_ranking *ranking, windrow_taker taker, void *context)
{
    for (uint64_t page = 0; page < ranking->pages; page++) {
        struct windrow_row row;
        enum windrow_status status = fill_row(ranking, page, &row);
        if (!status)
            status = taker(context, &row);
        if (status)
            return status;
    }
    return WINDROW_OK;
}
