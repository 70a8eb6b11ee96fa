/* arrays_bench: writes a store's links as plain arrays, for libraries that want them so.
 *
 *     arrays_bench STORE DIRECTORY
 *
 * By page ids, the machine's own byte order: DIRECTORY/starts (64 bits; one more than pages), sources (32 bits;
 * those of page p are starts[p] to before starts[p + 1]) and degrees (32 bits, out-links of each page).
 */
#include "bench.h"

#include "base/file.h"

#include <stdio.h>
#include <stdlib.h>

static void write_array(const char *directory, const char *name, const void *data, size_t bytes)
{
    char *path = windrow_path(directory, "%s", name);
    FILE *file = path ? fopen(path, "wb") : NULL;
    if (!file || fwrite(data, 1, bytes, file) != bytes || fclose(file)) {
        fprintf(stderr, "arrays_bench: %s/%s cannot be written\n", directory, name);
        exit(WINDROW_RESOURCE);
    }
    free(path);
}

int main(int argc, char **argv)
{
    if (argc != 3)
        bench_usage("arrays_bench STORE DIRECTORY");
    struct bench_store store = bench_store_open(argv[1]);
    uint64_t pages = store.web.pages, count = 0;
    struct bench_pages ids = bench_pages_load(&store);
    struct bench_links links[WINDROW_BLOCK_KINDS];
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
        links[kind] = bench_links_load(&store, kind);
    uint64_t *starts = bench_memory(pages + 1, sizeof *starts);
    uint32_t *sources = bench_memory(store.web.links[0] + store.web.links[1], sizeof *sources);
    uint32_t *degrees = bench_memory(pages, sizeof *degrees);
    for (uint64_t page = 0; page < pages; page++) {
        uint64_t number;
        bool core = windrow_store_page_number(store.store, page, &number);
        const struct bench_links *own = &links[core ? WINDROW_BLOCK_CORE : WINDROW_BLOCK_RIM];
        for (uint64_t i = own->starts[number]; i < own->starts[number + 1]; i++)
            sources[count++] = ids.of[WINDROW_BLOCK_CORE][own->sources[i]];
        starts[page + 1] = count;
        degrees[page] = core ? store.web.degrees[number] : 0;
    }
    write_array(argv[2], "starts", starts, (pages + 1) * sizeof *starts);
    write_array(argv[2], "sources", sources, count * sizeof *sources);
    write_array(argv[2], "degrees", degrees, pages * sizeof *degrees);
    windrow_store_close(store.store);
    return 0;
}
