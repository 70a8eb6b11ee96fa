/* store: the finished product of sharding, opened for reading (byte layouts: FORMAT.md).
 *
 * A store is a directory: page table, host table, degrees, link blocks, and the manifest that knows
 * their sizes and checksums. Opening checks the manifest against its seal and maps the flat files,
 * each after its checksum was found right. Blocks and page frames are checked as they are read.
 *
 * Threads: after opening, all functions may be called from any thread; readers of pages are objects of
 * their own, one a thread.
 */
#ifndef WINDROW_STORE_STORE_H
#define WINDROW_STORE_STORE_H

#include "store/block.h"
#include "windrow.h"

struct windrow_store;

struct windrow_store_facts {
    uint64_t pages;
    uint64_t crawled_pages;   /* stood as a source */
    uint64_t dangling_pages;  /* without a kept out-link */
    uint64_t core_pages;      /* with one: pages - dangling_pages */
    uint64_t links;
    uint64_t core_links;      /* from core page to core page */
    uint64_t hosts;
    uint64_t key_bytes;       /* of all page keys; a URL is some 6 bytes longer */
    uint64_t fingerprint;     /* of everything in the store: equal stores have equal ones */
};

/* WINDROW_USAGE: there is no store; WINDROW_NO: it is not finished yet; WINDROW_DAMAGED. */
enum windrow_status windrow_store_open(const char *path, struct windrow_store **store);
void windrow_store_close(struct windrow_store *store); /* NULL is fine */
const struct windrow_store_facts *windrow_store_facts(const struct windrow_store *store);
const char *windrow_store_path(const struct windrow_store *store);

/* Out-degree of each core page, by core number; at least 1. Valid until the store is closed. */
const uint32_t *windrow_store_degrees(const struct windrow_store *store);
/* Of these links, those that end at a core page of the same host. */
const uint32_t *windrow_store_inside_degrees(const struct windrow_store *store);

/* Page id to number: true and the core number, or false and the rim number. page < pages. */
bool windrow_store_page_number(const struct windrow_store *store, uint64_t page, uint64_t *number);
/* Core number to page id. core < core_pages. */
uint64_t windrow_store_core_page(const struct windrow_store *store, uint64_t core);
/* True when the page was crawled. */
bool windrow_store_page_crawled(const struct windrow_store *store, uint64_t page);

/* A host's pages and core pages are contiguous: from its own first_... to the next host's. */
struct windrow_host {
    uint64_t first_page;
    uint64_t first_core;
    const char *name;         /* not terminated; valid until the store is closed */
    uint32_t name_bytes;
    uint32_t domain_bytes;    /* the registered domain is the last domain_bytes bytes of the name */
};

/* host <= hosts: the host after the last has the store's page and core counts as its firsts, and no name. */
struct windrow_host windrow_store_host(const struct windrow_store *store, uint64_t host);
uint64_t windrow_store_host_of_page(const struct windrow_store *store, uint64_t page);
/* Blocks in target order. */
uint64_t windrow_store_block_count(const struct windrow_store *store, enum windrow_block_kind kind);
const struct windrow_block_record *windrow_store_block_record(const struct windrow_store *store, enum windrow_block_kind kind, uint64_t block);

/* What reading blocks needs again and again; all zero at first. One a thread. */
struct windrow_block_reader {
    struct windrow_buffer frame;
    struct windrow_buffer payload;
    void *decompressor;
};

/* Reads, checks and parses a block; it is valid until the reader's next use. */
enum windrow_status windrow_store_block_read(const struct windrow_store *store, enum windrow_block_kind kind, uint64_t block,
                                             struct windrow_block_reader *reader, struct windrow_block *out);
void windrow_block_reader_free(struct windrow_block_reader *reader);

/* Reads pages' URLs; keeps the frame it read last. One a thread. */
struct windrow_page_reader;
enum windrow_status windrow_page_reader_create(const struct windrow_store *store, struct windrow_page_reader **reader);
void windrow_page_reader_destroy(struct windrow_page_reader *reader);
/* The URL in normal form; valid until the reader's next use. */
enum windrow_status windrow_page_reader_url(struct windrow_page_reader *reader, uint64_t page, const char **url, size_t *url_bytes);
/* The page of a URL (any spelling; brought to normal form first). WINDROW_NO: unknown or not a URL of a page;
 * a URL that an alias folded finds the page that it was folded into. */
enum windrow_status windrow_page_reader_find(struct windrow_page_reader *reader, const char *url, size_t url_bytes,
                                             uint64_t *page, bool *folded);

/* WINDROW_DAMAGED when a file of the manifest cannot be looked at. */
enum windrow_status windrow_store_sizes(const struct windrow_store *store, struct windrow_store_sizes *sizes);

/* Reads a store back: seal and manifest; bytes and checksum of every file, and that there is no other where pages and links
 * live; every frame of the page table, its keys and their order; hosts, core map and counts against the keys; every
 * block, and both kinds of degrees recounted from them; the table of aliases. Goes on after damage as far as what is left
 * can be made sense of.
 *
 * threads   at least 1; takes 8 bytes of memory a core page, and some MiB a thread
 * found     is called from the calling thread, with one line for each damage that names file and place; the same lines
 *           in the same order for any number of threads. Of very many, some of the last are counted only.
 * watch     may be NULL; the stage is "verifying"
 *
 * WINDROW_NO: there was damage, or (without a call of `found`) the store is not finished; WINDROW_USAGE: there is no store;
 * WINDROW_RESOURCE; WINDROW_STOPPED.
 */
enum windrow_status windrow_store_verify(const char *path, unsigned threads, void (*found)(void *context, const char *damage),
                                         void *context, const struct windrow_watch *watch);

#endif
