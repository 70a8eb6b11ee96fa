/* layout: records and names that the writer and the reader of a store share (FORMAT.md has the byte tables). */
#ifndef WINDROW_STORE_LAYOUT_H
#define WINDROW_STORE_LAYOUT_H

#include "store/manifest.h"

#include <stdio.h>

/* The unit of parallel merging and of resuming: so many consecutive page ids, a file of pages and of blocks each. */
#define WINDROW_SEGMENT_PAGES (UINT64_C(1) << 18)

/* Which pages are core pages, and how many core pages stand before: one record for each 512 pages. */
#define WINDROW_CORE_GROUP_PAGES 512
struct windrow_core_group {
    uint64_t rank;
    uint64_t core[WINDROW_CORE_GROUP_PAGES / 64];
    uint64_t crawled[WINDROW_CORE_GROUP_PAGES / 64];
};

/* A host; after the last stands one more record that carries the totals. */
struct windrow_host_record {
    uint64_t first_page;
    uint64_t first_core;
    uint64_t name_at;       /* in the file host-names */
    uint32_t name_bytes;
    uint32_t domain_bytes;
};

static inline void windrow_layout_block_file(char *name, size_t capacity, enum windrow_block_kind kind, uint64_t segment)
{
    snprintf(name, capacity, "links/%06llu.%s.zst", (unsigned long long)segment, kind == WINDROW_BLOCK_CORE ? "core" : "rim");
}

/* For the floors that make, check and repair stores; answers use store/store.h. */
const struct windrow_manifest *windrow_store_manifest(const struct windrow_store *store);
/* Opens what the manifest (taken over, left empty) describes, without a seal: for the job that is about to set it. */
enum windrow_status windrow_store_open_manifest(const char *path, struct windrow_manifest *manifest, struct windrow_store **store);
/* The index of the page table, or of the table of aliases (frame_count 0: there is none). */
struct windrow_pages_index;
const struct windrow_pages_index *windrow_store_pages_index(const struct windrow_store *store);
const struct windrow_pages_index *windrow_store_alias_index(const struct windrow_store *store);
/* Calls `each` for every folded URL of the store, in host order, with the page that it was folded into. */
enum windrow_status windrow_store_each_alias(const struct windrow_store *store,
                                             enum windrow_status (*each)(void *context, const uint8_t *key, size_t key_bytes, uint64_t page),
                                             void *context);
bool windrow_store_has_aliases(const struct windrow_store *store);
struct windrow_page_reader;
enum windrow_status windrow_page_reader_key(struct windrow_page_reader *reader, uint64_t page, const uint8_t **key, size_t *key_bytes);
enum windrow_status windrow_page_reader_find_key(struct windrow_page_reader *reader, const char *key, size_t key_bytes, uint64_t *page);

#endif
