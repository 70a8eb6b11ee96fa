/* plan: what a job takes on disk, worked out from its counts. (The public door is windrow_plan().)
 *
 * Pure functions: nothing is read or remembered. The constants behind them were measured on stores of synthetic crawls of 5 and 20
 * million links and of six real ones (plan.c says which); they are meant to be right within a quarter where the counts and
 * the sizes of a link and a page are.
 */
#ifndef WINDROW_SHARD_PLAN_H
#define WINDROW_SHARD_PLAN_H

#include "windrow.h"

/* What sizes follow from; bits and bytes that are 0 are taken from a usual crawl. */
struct windrow_plan_sizes {
    double links, pages, core_pages, hosts;
    double link_bits;   /* block bytes × 8 / links */
    double page_bytes;  /* of the page table's frames, a page */
    double name_bytes;  /* of a host's name */
};

struct windrow_plan_disk {
    uint64_t store_bytes;    /* what is left in the end */
    uint64_t scratch_bytes;  /* the most that scratch files take at a time */
    uint64_t disk_bytes;     /* scratch and store together at the worst moment */
};

struct windrow_plan_disk windrow_plan_sizes_disk(const struct windrow_plan_sizes *sizes);

/* The same when no more is known than how many links and pages there are: all pages are core pages, a host has 20
 * pages, a link takes 6 bits and a page 6 bytes. */
struct windrow_plan_disk windrow_plan_disk(uint64_t links, uint64_t pages);

#endif
