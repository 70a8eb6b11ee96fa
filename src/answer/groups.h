/* groups: a crawl's hosts or registered domains, one after another in host order, each with its pages.
 *
 * A host's pages are one span. A domain's hosts need not be neighbours: where a public suffix lies below
 * a registered domain (say, a hosting service's), the domains under that suffix stand between the hosts
 * of the domain around them. Domains come in the host order of their own names, an outer one before those
 * inside it. To find a domain's hosts, the hosts that share their last two labels are looked at together.
 *
 * Threads: one object, one thread.
 */
#ifndef WINDROW_ANSWER_GROUPS_H
#define WINDROW_ANSWER_GROUPS_H

#include "answer/leaders.h"
#include "store/store.h"

/* Where hosts come from: host 0 … host_count, the last one (without a name) telling the number of pages. */
struct windrow_host_source {
    struct windrow_host (*host)(const void *context, uint64_t host);
    const void *context;
    uint64_t host_count;
};

struct windrow_groups {
    struct windrow_host_source source;
    enum windrow_per per;            /* host or domain */
    uint64_t next_host;              /* the first that no group or block has taken yet */
    struct windrow_buffer block;     /* domains: hosts that share two labels, sorted by domain */
    size_t block_next;
    struct windrow_buffer spans;
};

struct windrow_group {
    const char *name;                /* not terminated; valid as long as the hosts' names are */
    size_t name_bytes;
    const struct windrow_span *spans; /* valid until the next group */
    size_t span_count;
};

void windrow_groups_begin(struct windrow_groups *groups, const struct windrow_host_source *source, enum windrow_per per);
/* The next group; *found is false behind the last one. */
enum windrow_status windrow_groups_next(struct windrow_groups *groups, struct windrow_group *group, bool *found);
void windrow_groups_free(struct windrow_groups *groups);

#endif
