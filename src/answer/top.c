/* The first pages of the crawl (a prefix of the order), or of each host or domain (found among its scores). */
#include "answer/delivery.h"
#include "answer/groups.h"
#include "answer/leaders.h"
#include "answer/ranking.h"

static enum windrow_status top_of_all(struct windrow_ranking *ranking, uint64_t count, struct windrow_delivery *delivery)
{
    if (count > ranking->pages)
        count = ranking->pages;
    struct windrow_range range = {0};
    double range_score = -1; /* whose range it is: equal scores share it */
    for (uint64_t place = 1; place <= count; place++) {
        uint64_t page = windrow_order_page(ranking->order, place);
        double score = windrow_order_score(ranking->order, place);
        if (page >= ranking->pages || ranking->scores[page] != score)
            return windrow_fail(WINDROW_DAMAGED, "%s: the run's order and its scores do not belong together at place %llu; rank again with --fresh",
                                windrow_store_path(ranking->store), (unsigned long long)place);
        if (score != range_score) {
            range = windrow_place_range(ranking->order, &ranking->bounds, score, place);
            range_score = score;
        }
        struct windrow_row row = windrow_ranking_row(ranking, score, range);
        row.place = place;
        enum windrow_status status = windrow_delivery_add(delivery, page, &row);
        if (status)
            return status;
    }
    return WINDROW_OK;
}

static struct windrow_host store_host(const void *context, uint64_t host)
{
    return windrow_store_host(context, host);
}

static enum windrow_status top_of_groups(struct windrow_ranking *ranking, enum windrow_per per, uint64_t count, struct windrow_delivery *delivery)
{
    const struct windrow_host_source source = {store_host, ranking->store, windrow_store_facts(ranking->store)->hosts};
    struct windrow_groups groups;
    struct windrow_group group;
    struct windrow_leaders leaders = {0};
    enum windrow_status status;
    bool found;
    windrow_groups_begin(&groups, &source, per);
    while (!(status = windrow_groups_next(&groups, &group, &found)) && found) {
        if ((status = windrow_leaders_find(ranking->scores, group.spans, group.span_count, count, &ranking->bounds, &leaders)))
            break;
        for (uint64_t i = 0; i < leaders.count && !status; i++) {
            const struct windrow_leader *leader = &leaders.leaders[i];
            struct windrow_row row = windrow_ranking_row(ranking, leader->score, leader->range);
            row.place = i + 1;
            row.group = group.name;
            row.group_bytes = group.name_bytes;
            status = windrow_delivery_add(delivery, leader->page, &row);
        }
        if (status)
            break;
    }
    windrow_leaders_free(&leaders);
    windrow_groups_free(&groups);
    return status;
}

enum windrow_status windrow_ranking_top(struct windrow_ranking *ranking, enum windrow_per per, uint64_t count,
                                        windrow_taker taker, void *context)
{
    struct windrow_delivery delivery;
    windrow_delivery_begin(&delivery, ranking->reader, taker, context);
    enum windrow_status status = per == WINDROW_PER_ALL ? top_of_all(ranking, count, &delivery)
                                                        : top_of_groups(ranking, per, count, &delivery);
    if (!status)
        status = windrow_delivery_end(&delivery);
    windrow_delivery_free(&delivery);
    return status;
}
