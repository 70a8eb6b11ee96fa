/* sizes_bench: what the parts of stores take.
 *
 *     sizes_bench STORE…
 *
 * Bits a link over all links, of the blocks of core and of dangling pages each, and of the whole store; and the page
 * table against the front-coded bytes of its URLs: for each URL in host order, the bytes that differ from the
 * one before, a number for their count and one for the shared prefix, in LEB128.
 */
#include "bench.h"

#include <libgen.h>
#include <stdio.h>
#include <string.h>

static uint64_t number_bytes(size_t number)
{
    uint64_t bytes = 1;
    while (number >>= 7)
        bytes++;
    return bytes;
}

static uint64_t front_coded_bytes(const struct bench_store *store, uint64_t *plain)
{
    static char before[128 << 10];
    size_t before_bytes = 0;
    uint64_t sum = 0;
    struct windrow_page_reader *reader;
    *plain = 0;
    bench_expect(windrow_page_reader_create(store->store, &reader), store->path);
    for (uint64_t page = 0; page < store->web.pages; page++) {
        const char *url;
        size_t url_bytes, shared = 0;
        bench_expect(windrow_page_reader_url(reader, page, &url, &url_bytes), store->path);
        if (url_bytes > sizeof before)
            bench_expect(windrow_fail(WINDROW_BUG, "a URL of %zu bytes", url_bytes), store->path);
        while (shared < url_bytes && shared < before_bytes && url[shared] == before[shared])
            shared++;
        sum += number_bytes(shared) + number_bytes(url_bytes - shared) + url_bytes - shared;
        *plain += url_bytes + 1;
        memcpy(before, url, url_bytes);
        before_bytes = url_bytes;
    }
    windrow_page_reader_destroy(reader);
    return sum;
}

static double bits(uint64_t bytes, uint64_t count)
{
    return count ? 8.0 * (double)bytes / (double)count : 0;
}

int main(int argc, char **argv)
{
    if (argc < 2)
        bench_usage("sizes_bench STORE...");
    printf("%-28s %11s %11s | bits a link: %5s %5s %5s %6s | URL table, bytes a page: %5s %6s %6s %6s\n", "store", "pages", "links", "all", "core", "rim",
           "store", "table", "index", "front", "ratio");
    for (int i = 1; i < argc; i++) {
        struct bench_store store = bench_store_open(argv[i]);
        struct windrow_store_sizes sizes;
        uint64_t plain, front = front_coded_bytes(&store, &plain), pages = store.web.pages;
        uint64_t core = store.web.links[WINDROW_BLOCK_CORE], rim = store.web.links[WINDROW_BLOCK_RIM];
        bench_expect(windrow_store_sizes(store.store, &sizes), argv[i]);
        printf("%-28s %11llu %11llu |              %5.2f %5.2f %5.2f %6.2f |                          %5.2f %6.2f %6.2f %6.3f\n", basename(argv[i]),
               (unsigned long long)pages, (unsigned long long)(core + rim), bits(sizes.core_link_bytes + sizes.rim_link_bytes, core + rim),
               bits(sizes.core_link_bytes, core), bits(sizes.rim_link_bytes, rim), bits(sizes.all_bytes, core + rim),
               bits(sizes.page_bytes, pages) / 8, bits(sizes.page_index_bytes, pages) / 8, bits(front, pages) / 8,
               (double)(sizes.page_bytes + sizes.page_index_bytes) / (double)(front ? front : 1));
        windrow_store_close(store.store);
    }
    return 0;
}
