#include "answer/groups.h"

#include <stdlib.h>
#include <string.h>

/* A host of the block, with its domain. */
struct member {
    uint64_t host;
    const char *domain;
    size_t domain_bytes;
};

/* The bytes of the name's last label. */
static size_t last_label_bytes(const char *name, size_t name_bytes)
{
    const char *dot = memrchr(name, '.', name_bytes);
    return dot ? (size_t)(name + name_bytes - dot - 1) : name_bytes;
}

/* The bytes of the name's last two labels and the dot between them; the whole name when it has fewer. */
static size_t two_labels_bytes(const char *name, size_t name_bytes)
{
    size_t last = last_label_bytes(name, name_bytes);
    return last == name_bytes ? last : last + 1 + last_label_bytes(name, name_bytes - last - 1);
}

static int compare_bytes(const char *a, size_t a_bytes, const char *b, size_t b_bytes)
{
    int difference = memcmp(a, b, a_bytes < b_bytes ? a_bytes : b_bytes);
    return difference ? difference : (a_bytes > b_bytes) - (a_bytes < b_bytes);
}

/* Host order: label by label from the end, what ends first comes first. */
static int compare_names(const char *a, size_t a_bytes, const char *b, size_t b_bytes)
{
    for (;;) {
        size_t a_label = last_label_bytes(a, a_bytes), b_label = last_label_bytes(b, b_bytes);
        int difference = compare_bytes(a + a_bytes - a_label, a_label, b + b_bytes - b_label, b_label);
        if (difference)
            return difference;
        if (a_label == a_bytes || b_label == b_bytes)
            return (a_label < a_bytes) - (b_label < b_bytes);
        a_bytes -= a_label + 1;
        b_bytes -= b_label + 1;
    }
}

static int compare_members(const void *left, const void *right)
{
    const struct member *a = left, *b = right;
    int difference = compare_names(a->domain, a->domain_bytes, b->domain, b->domain_bytes);
    return difference ? difference : (a->host > b->host) - (a->host < b->host);
}

static struct windrow_host host_at(const struct windrow_groups *groups, uint64_t host)
{
    return groups->source.host(groups->source.context, host);
}

/* Takes the next hosts that share their last two labels into the block. */
static enum windrow_status fill_block(struct windrow_groups *groups)
{
    groups->block.bytes = 0;
    groups->block_next = 0;
    const char *shared = NULL;
    size_t shared_bytes = 0;
    bool sorted = true;
    for (; groups->next_host < groups->source.host_count; groups->next_host++) {
        struct windrow_host host = host_at(groups, groups->next_host);
        size_t bytes = two_labels_bytes(host.name, host.name_bytes);
        const char *labels = host.name + host.name_bytes - bytes;
        if (!shared) {
            shared = labels;
            shared_bytes = bytes;
        } else if (bytes != shared_bytes || memcmp(labels, shared, bytes)) {
            break;
        }
        struct member member = {.host = groups->next_host, .domain = host.name + host.name_bytes - host.domain_bytes,
                                .domain_bytes = host.domain_bytes};
        enum windrow_status status = windrow_buffer_append(&groups->block, &member, sizeof member);
        if (status)
            return status;
        const struct member *last = (const struct member *)(groups->block.data + groups->block.bytes) - 1;
        if ((const uint8_t *)last > groups->block.data && compare_members(last - 1, last) > 0)
            sorted = false;
    }
    if (!sorted)
        qsort(groups->block.data, groups->block.bytes / sizeof(struct member), sizeof(struct member), compare_members);
    return WINDROW_OK;
}

static enum windrow_status add_host(struct windrow_groups *groups, uint64_t host)
{
    struct windrow_span span = {host_at(groups, host).first_page, host_at(groups, host + 1).first_page};
    if (groups->spans.bytes) {
        struct windrow_span *last = (struct windrow_span *)(groups->spans.data + groups->spans.bytes) - 1;
        if (last->end == span.first) {
            last->end = span.end;
            return WINDROW_OK;
        }
    }
    return windrow_buffer_append(&groups->spans, &span, sizeof span);
}

static enum windrow_status next_domain(struct windrow_groups *groups, struct windrow_group *group, bool *found)
{
    enum windrow_status status;
    size_t count = groups->block.bytes / sizeof(struct member);
    if (groups->block_next == count) {
        if ((status = fill_block(groups)))
            return status;
        count = groups->block.bytes / sizeof(struct member);
    }
    *found = groups->block_next < count;
    if (!*found)
        return WINDROW_OK;
    const struct member *members = (const struct member *)groups->block.data, *first = &members[groups->block_next];
    group->name = first->domain;
    group->name_bytes = first->domain_bytes;
    do {
        if ((status = add_host(groups, members[groups->block_next++].host)))
            return status;
    } while (groups->block_next < count &&
             !compare_bytes(members[groups->block_next].domain, members[groups->block_next].domain_bytes, group->name, group->name_bytes));
    return WINDROW_OK;
}

void windrow_groups_begin(struct windrow_groups *groups, const struct windrow_host_source *source, enum windrow_per per)
{
    *groups = (struct windrow_groups){.source = *source, .per = per};
}

enum windrow_status windrow_groups_next(struct windrow_groups *groups, struct windrow_group *group, bool *found)
{
    enum windrow_status status = WINDROW_OK;
    *group = (struct windrow_group){0};
    groups->spans.bytes = 0;
    if (groups->per == WINDROW_PER_DOMAIN) {
        status = next_domain(groups, group, found);
    } else if ((*found = groups->next_host < groups->source.host_count)) {
        struct windrow_host host = host_at(groups, groups->next_host);
        group->name = host.name;
        group->name_bytes = host.name_bytes;
        status = add_host(groups, groups->next_host++);
    }
    group->spans = (const struct windrow_span *)groups->spans.data;
    group->span_count = groups->spans.bytes / sizeof(struct windrow_span);
    return status;
}

void windrow_groups_free(struct windrow_groups *groups)
{
    windrow_buffer_free(&groups->block);
    windrow_buffer_free(&groups->spans);
}
