#include "sweep/web.h"

#include <sys/mman.h>
#include <unistd.h>

/* Pages at the ends are let go of whole: they come back too. */
static void release_mapped(const void *memory, uint64_t bytes)
{
    uintptr_t page = (uintptr_t)sysconf(_SC_PAGESIZE), first = (uintptr_t)memory / page * page, end = ((uintptr_t)memory + bytes + page - 1) / page * page;
    if (bytes)
        madvise((void *)first, end - first, MADV_DONTNEED);
}

/* Degrees that are looked at between two releases. */
enum { RELEASE_PAGES = 1 << 20 };

static uint64_t store_host_first_core(const void *context, uint64_t host)
{
    return windrow_store_host(context, host).first_core;
}

static const struct windrow_block_record *store_record(const void *context, enum windrow_block_kind kind, uint64_t block)
{
    return windrow_store_block_record(context, kind, block);
}

static enum windrow_status store_read(const void *context, enum windrow_block_kind kind, uint64_t block,
                                      struct windrow_block_reader *reader, struct windrow_block *out)
{
    return windrow_store_block_read(context, kind, block, reader, out);
}

void windrow_web_of_store(const struct windrow_store *store, struct windrow_web *web)
{
    const struct windrow_store_facts *facts = windrow_store_facts(store);
    *web = (struct windrow_web){
        .pages = facts->pages,
        .core_pages = facts->core_pages,
        .links = {facts->core_links, facts->links - facts->core_links},
        .degrees = windrow_store_degrees(store),
        .inside_degrees = windrow_store_inside_degrees(store),
        .host_count = facts->hosts,
        .block_count = {windrow_store_block_count(store, WINDROW_BLOCK_CORE), windrow_store_block_count(store, WINDROW_BLOCK_RIM)},
        .context = store,
        .host_first_core = store_host_first_core,
        .record = store_record,
        .read = store_read,
        .release = release_mapped,
    };
}

static enum windrow_status broken(enum windrow_block_kind kind, uint64_t block, const char *what)
{
    return windrow_fail(WINDROW_DAMAGED, "%s block %llu %s; run `windrow verify` on the store",
                        kind == WINDROW_BLOCK_CORE ? "core" : "rim", (unsigned long long)block, what);
}

static enum windrow_status check_blocks(const struct windrow_web *web, enum windrow_block_kind kind, uint64_t targets)
{
    uint64_t next = 0, links = 0;
    bool list_open = false; /* the block before was a piece whose list goes on */
    for (uint64_t block = 0; block < web->block_count[kind]; block++) {
        const struct windrow_block_record *record = web->record(web->context, kind, block);
        bool piece = record->flags & WINDROW_BLOCK_PIECE, last = record->flags & WINDROW_BLOCK_LAST_PIECE;
        if (record->target_count == 0 || record->first_target != next || record->target_count > targets - next)
            return broken(kind, block, "does not begin where the one before it ends");
        if ((list_open && !piece) || (last && !piece) || (piece && record->target_count != 1))
            return broken(kind, block, "breaks a list that is stored in pieces");
        list_open = piece && !last;
        if (!list_open)
            next += record->target_count;
        links += record->link_count;
    }
    if (next != targets || list_open)
        return broken(kind, web->block_count[kind], "is missing: the last pages have no links stored");
    if (links != web->links[kind])
        return broken(kind, web->block_count[kind], "is missing: links do not add up");
    return WINDROW_OK;
}

enum windrow_status windrow_web_check(const struct windrow_web *web)
{
    if (web->core_pages > web->pages)
        return windrow_fail(WINDROW_DAMAGED, "the store claims more pages with links than pages");
    enum windrow_status status = check_blocks(web, WINDROW_BLOCK_CORE, web->core_pages);
    if (!status)
        status = check_blocks(web, WINDROW_BLOCK_RIM, web->pages - web->core_pages);
    if (status)
        return status;
    uint64_t before = 0;
    for (uint64_t host = 0; host <= web->host_count; host++) {
        uint64_t first = web->host_first_core(web->context, host);
        if (first < before || first > web->core_pages || (host == 0 && first != 0) || (host == web->host_count && first != web->core_pages))
            return windrow_fail(WINDROW_DAMAGED, "host %llu does not begin where the one before it ends; run `windrow verify` on the store",
                                (unsigned long long)host);
        before = first;
    }
    for (uint64_t core = 0, kept = 0; core < web->core_pages; core++) {
        if (web->release && (core - kept == RELEASE_PAGES || core + 1 == web->core_pages)) {
            web->release(web->degrees + kept, (core - kept) * sizeof *web->degrees);
            web->release(web->inside_degrees + kept, (core - kept) * sizeof *web->inside_degrees);
            kept = core;
        }
        if (web->degrees[core] == 0 || web->inside_degrees[core] > web->degrees[core])
            return windrow_fail(WINDROW_DAMAGED, "core page %llu has impossible degrees; run `windrow verify` on the store",
                                (unsigned long long)core);
    }
    return WINDROW_OK;
}
