#include "store/layout.h"

#include <errno.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>

static enum windrow_status file_bytes(const struct windrow_store *store, const char *name, uint64_t *bytes)
{
    char *path = windrow_path(windrow_store_path(store), "%s", name);
    if (!path)
        return windrow_fail(WINDROW_RESOURCE, "out of memory for a path");
    struct stat facts;
    enum windrow_status status = WINDROW_OK;
    if (stat(path, &facts))
        status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot look at %s", path);
    else
        *bytes += (uint64_t)facts.st_size;
    free(path);
    return status;
}

static bool ends_with(const char *name, const char *end)
{
    size_t name_bytes = strlen(name), end_bytes = strlen(end);
    return name_bytes >= end_bytes && strcmp(name + name_bytes - end_bytes, end) == 0;
}

/* The part that a file of the manifest belongs to. */
static uint64_t *part_of(struct windrow_store_sizes *sizes, const char *name)
{
    if (strncmp(name, "pages/", 6) == 0)
        return &sizes->page_bytes;
    if (strncmp(name, "links/", 6) == 0)
        return ends_with(name, ".core.zst") ? &sizes->core_link_bytes : &sizes->rim_link_bytes;
    if (strncmp(name, "page-", 5) == 0)
        return &sizes->page_index_bytes;
    if (strncmp(name, "host", 4) == 0)
        return &sizes->host_bytes;
    if (strcmp(name, "core-map") == 0)
        return &sizes->core_map_bytes;
    if (ends_with(name, "degrees"))
        return &sizes->degree_bytes;
    return &sizes->alias_bytes;
}

enum windrow_status windrow_store_sizes(const struct windrow_store *store, struct windrow_store_sizes *sizes)
{
    *sizes = (struct windrow_store_sizes){0};
    const struct windrow_manifest *manifest = windrow_store_manifest(store);
    enum windrow_status status = file_bytes(store, "manifest/data.mdb", &sizes->manifest_bytes);
    if (!status)
        status = file_bytes(store, "seal", &sizes->manifest_bytes);
    sizes->all_bytes = sizes->manifest_bytes;
    for (size_t file = 0; file < manifest->file_count; file++) {
        *part_of(sizes, manifest->files[file].name) += manifest->files[file].bytes;
        sizes->all_bytes += manifest->files[file].bytes;
    }
    return status;
}
