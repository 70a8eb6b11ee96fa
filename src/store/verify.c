/* Three passes, each a crew's work: files against their checksums; frames of the page table, each beside its stretch of
 * the host table and the core map; blocks, which also recount the degrees. What one task sees of its neighbours is
 * compared between the passes. Damage is kept by (pass, task) and told in that order, so threads do not show. */
#include "base/crew.h"
#include "base/meter.h"
#include "store/layout.h"
#include "store/pages.h"
#include "url/domain.h"
#include "url/key.h"

#include <dirent.h>
#include <errno.h>
#include <fcntl.h>
#include <pthread.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define LINES_MOST 1000 /* of each pass */

struct damage {
    uint64_t task;
    uint64_t number; /* within the task */
    char *text;
};

struct worker {
    struct windrow_pages_frame frame;
    struct windrow_block_reader reader;
    struct windrow_lists lists;
};

/* What is remembered of a block for the look at its neighbours. */
struct block_ends {
    uint64_t first, last; /* sources */
    bool known;
};

struct verification {
    const char *path;
    struct windrow_crew *crew;
    struct windrow_meter meter;
    const struct windrow_manifest *manifest;
    const struct windrow_store *store;
    struct worker *workers;
    bool *missing;              /* files of the manifest that cannot be opened: told once */

    pthread_mutex_t lock;       /* for damages */
    struct damage *damages;     /* of the pass going on */
    size_t damage_count, damage_capacity;
    uint64_t untold;
    uint64_t total;             /* of all passes */
    void (*found)(void *context, const char *damage);
    void *context;

    bool domains_known;         /* the store was made with the list of domains that this program has */
    atomic_uint_fast64_t key_bytes, crawled_pages, links[WINDROW_BLOCK_KINDS];
    atomic_uint_fast64_t unread; /* frames or blocks */
    _Atomic uint32_t *degrees, *inside; /* recounted */
    struct block_ends *ends[WINDROW_BLOCK_KINDS];
};

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory while verifying a store");
}

/* ---- Damage ---- */

static int damage_order(const void *a, const void *b)
{
    const struct damage *left = a, *right = b;
    if (left->task != right->task)
        return left->task < right->task ? -1 : 1;
    return left->number < right->number ? -1 : left->number > right->number;
}

/* Keeps the first lines in order; the others are counted. */
static void trim(struct verification *verification)
{
    if (!verification->damage_count)
        return;
    qsort(verification->damages, verification->damage_count, sizeof *verification->damages, damage_order);
    while (verification->damage_count > LINES_MOST) {
        free(verification->damages[--verification->damage_count].text);
        verification->untold++;
    }
}

/* Notes a damage that a task found. */
__attribute__((format(printf, 3, 4)))
static enum windrow_status note(struct verification *verification, uint64_t task, const char *format, ...)
{
    char *text = NULL;
    va_list arguments;
    va_start(arguments, format);
    int length = vasprintf(&text, format, arguments);
    va_end(arguments);
    if (length < 0)
        return memory();
    pthread_mutex_lock(&verification->lock);
    enum windrow_status status = WINDROW_OK;
    if (verification->damage_count == verification->damage_capacity) {
        if (verification->damage_count > LINES_MOST) {
            trim(verification);
        } else {
            size_t capacity = verification->damage_capacity ? 2 * verification->damage_capacity : 64;
            struct damage *damages = realloc(verification->damages, capacity * sizeof *damages);
            if (damages) {
                verification->damages = damages;
                verification->damage_capacity = capacity;
            } else {
                status = memory();
            }
        }
    }
    if (status)
        free(text);
    else /* a task's own lines come one after another, so the running total orders them */
        verification->damages[verification->damage_count++] = (struct damage){task, verification->total++, text};
    pthread_mutex_unlock(&verification->lock);
    return status;
}

/* Notes a failure that is damage; others are the caller's. */
static enum windrow_status note_failure(struct verification *verification, uint64_t task, enum windrow_status status)
{
    if (status != WINDROW_DAMAGED && status != WINDROW_NO)
        return status;
    return note(verification, task, "%s", windrow_message());
}

/* Tells the damages of a pass. */
static void tell(struct verification *verification)
{
    trim(verification);
    for (size_t index = 0; index < verification->damage_count; index++) {
        verification->found(verification->context, verification->damages[index].text);
        free(verification->damages[index].text);
    }
    if (verification->untold) {
        char text[100];
        snprintf(text, sizeof text, "%llu more damages of this kind were found", (unsigned long long)verification->untold);
        verification->found(verification->context, text);
    }
    verification->damage_count = 0;
    verification->untold = 0;
}

static enum windrow_status stopping(const struct verification *verification)
{
    if (windrow_meter_stopping(&verification->meter))
        return windrow_fail(WINDROW_STOPPED, "stopped while verifying");
    return WINDROW_OK;
}

/* ---- Files ---- */

static enum windrow_status check_file(void *context, uint64_t task, unsigned worker)
{
    (void)worker;
    struct verification *verification = context;
    const struct windrow_manifest_file *file = &verification->manifest->files[task];
    enum windrow_status status = stopping(verification);
    if (status)
        return status;
    char *path = windrow_path(verification->path, "%s", file->name);
    if (!path)
        return memory();
    uint64_t bytes = 0, checksum = 0;
    status = windrow_file_checksum(path, &bytes, &checksum);
    verification->missing[task] = status != WINDROW_OK;
    if (status)
        status = note_failure(verification, task, status);
    else if (bytes != file->bytes)
        status = note(verification, task, "%s has %llu bytes, not %llu", path, (unsigned long long)bytes, (unsigned long long)file->bytes);
    else if (checksum != file->checksum)
        status = note(verification, task, "%s does not match its checksum: some of its %llu bytes were changed", path, (unsigned long long)bytes);
    windrow_meter_add(&verification->meter, file->bytes);
    free(path);
    return status;
}

static int text_order(const void *a, const void *b)
{
    return strcmp(*(char *const *)a, *(char *const *)b);
}

/* Looks for files that the manifest does not name; told in the order of their names. */
static enum windrow_status check_strays(struct verification *verification, const char *directory, uint64_t task)
{
    char *path = windrow_path(verification->path, "%s", directory), **names = NULL;
    size_t count = 0, capacity = 0;
    DIR *listing = path ? opendir(path) : NULL;
    enum windrow_status status = WINDROW_OK;
    if (!listing)
        status = path ? note(verification, task, "cannot list %s: %s", path, strerror(errno)) : memory();
    for (struct dirent *entry; listing && !status && (entry = readdir(listing));) {
        char name[300];
        snprintf(name, sizeof name, "%s/%s", directory, entry->d_name);
        if (strcmp(entry->d_name, ".") == 0 || strcmp(entry->d_name, "..") == 0 || windrow_manifest_file(verification->manifest, name))
            continue;
        if (count == capacity) {
            capacity = 2 * capacity + 16;
            char **more = realloc(names, capacity * sizeof *more);
            if (!more) {
                status = memory();
                break;
            }
            names = more;
        }
        if (!(names[count] = strdup(entry->d_name)))
            status = memory();
        else
            count++;
    }
    if (count)
        qsort(names, count, sizeof *names, text_order);
    for (size_t index = 0; index < count; index++) {
        if (!status)
            status = note(verification, task, "%s/%s is no part of the store", path, names[index]);
        free(names[index]);
    }
    free(names);
    if (listing)
        closedir(listing);
    free(path);
    return status;
}

static enum windrow_status check_files(struct verification *verification)
{
    uint64_t count = verification->manifest->file_count;
    enum windrow_status status = windrow_crew_run(verification->crew, count, check_file, verification);
    if (!status)
        status = check_strays(verification, "pages", count);
    if (!status)
        status = check_strays(verification, "links", count + 1);
    return status;
}

static bool file_missing(const struct verification *verification, const char *name)
{
    const struct windrow_manifest_file *file = windrow_manifest_file(verification->manifest, name);
    return !file || verification->missing[file - verification->manifest->files];
}

/* ---- Pages ---- */

/* Core pages before `page`, as the core map has it. page <= pages. */
static uint64_t cores_before(const struct verification *verification, uint64_t page)
{
    uint64_t number;
    return windrow_store_page_number(verification->store, page, &number) ? number : page - number;
}

/* Compares a key with the host that its page should belong to. */
static bool host_agrees(const struct windrow_host *host, const uint8_t *key, size_t host_bytes)
{
    char name[256], *text = host_bytes < sizeof name ? name : malloc(host_bytes + 1);
    bool good = text && windrow_key_host((const char *)key, host_bytes, text, host_bytes + 1) == host->name_bytes &&
                memcmp(text, host->name, host->name_bytes) == 0;
    if (text != name)
        free(text);
    return good;
}

/* Checks the decoded pages [first, first + key_count) against their keys, hosts and core map. */
static enum windrow_status check_pages(struct verification *verification, uint64_t task, const struct windrow_pages_frame *frame, const char *path)
{
    const struct windrow_store *store = verification->store;
    uint64_t host_number = windrow_store_host_of_page(store, frame->first_entry), checked_host = UINT64_MAX;
    struct windrow_host host = windrow_store_host(store, host_number), next = windrow_store_host(store, host_number + 1);
    uint64_t cores = cores_before(verification, frame->first_entry), key_bytes = 0, crawled = 0;
    const uint8_t *before = NULL;
    size_t before_host_bytes = 0;
    enum windrow_status status = WINDROW_OK;
    for (uint32_t index = 0; !status && index < frame->key_count; index++) {
        const uint8_t *key = frame->keys.data + frame->key_at[index];
        size_t bytes = frame->key_at[index + 1] - frame->key_at[index];
        uint64_t page = frame->first_entry + index, number;
        key_bytes += bytes;
        if (!windrow_key_validate((const char *)key, bytes))
            status = note(verification, task, "the key of page %llu in %s is not that of a URL", (unsigned long long)page, path);
        while (page >= next.first_page) {
            host = next;
            next = windrow_store_host(store, ++host_number + 1);
        }
        size_t host_bytes = windrow_key_host_bytes((const char *)key, bytes);
        bool same = before && host_bytes == before_host_bytes && memcmp(before, key, host_bytes) == 0;
        if (!status && (!same || checked_host != host_number) && !host_agrees(&host, key, host_bytes))
            status = note(verification, task, "page %llu in %s is not of host %llu, to which the host table counts it", (unsigned long long)page, path,
                          (unsigned long long)host_number);
        checked_host = host_number;
        before = key;
        before_host_bytes = host_bytes;
        bool core = windrow_store_page_number(store, page, &number), fetched = windrow_store_page_crawled(store, page);
        if (!status && number != (core ? cores : page - cores))
            status = note(verification, task, "the core map gives page %llu the number %llu, which is not the next one", (unsigned long long)page,
                          (unsigned long long)number);
        if (!status && core && !fetched)
            status = note(verification, task, "the core map has page %llu linking but never fetched", (unsigned long long)page);
        cores = core && number == cores ? cores + 1 : cores_before(verification, page + 1);
        crawled += fetched;
    }
    atomic_fetch_add(&verification->key_bytes, key_bytes);
    atomic_fetch_add(&verification->crawled_pages, crawled);
    return status;
}

static enum windrow_status check_frame(void *context, uint64_t task, unsigned worker)
{
    struct verification *verification = context;
    struct windrow_pages_frame *frame = &verification->workers[worker].frame;
    const struct windrow_pages_index *index = windrow_store_pages_index(verification->store);
    const struct windrow_pages_mark *mark = &index->marks[task];
    char name[64];
    snprintf(name, sizeof name, "pages/%06llu.zst", (unsigned long long)(mark->first_entry / WINDROW_SEGMENT_PAGES));
    enum windrow_status status = stopping(verification);
    if (status)
        return status;
    if (file_missing(verification, name)) {
        atomic_fetch_add(&verification->unread, 1);
        return WINDROW_OK;
    }
    char *path = windrow_path(verification->path, "%s", name);
    int descriptor = path ? windrow_files.open(path, O_RDONLY, 0) : -1;
    if (descriptor < 0)
        status = path ? windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open %s", path) : memory();
    if (!status)
        status = windrow_pages_frame_read(index, task, descriptor, path, false, frame);
    if (status) {
        atomic_fetch_add(&verification->unread, 1);
        status = note_failure(verification, task, status);
    } else {
        /* Keys ascend within a frame, which its reading has checked; the next frame's first key stands in the index. */
        const uint8_t *last = frame->keys.data + frame->key_at[frame->key_count - 1];
        size_t last_bytes = frame->key_at[frame->key_count] - frame->key_at[frame->key_count - 1];
        if (task + 1 < index->frame_count && windrow_key_compare((const char *)last, last_bytes, (const char *)index->keys + mark[1].key_at,
                                                                 (size_t)(mark[2].key_at - mark[1].key_at)) >= 0)
            status = note(verification, task, "the keys of %s do not ascend at page %llu", path, (unsigned long long)mark[1].first_entry);
        if (!status && mark->first_entry / WINDROW_SEGMENT_PAGES != (mark[1].first_entry - 1) / WINDROW_SEGMENT_PAGES)
            status = note(verification, task, "the frame of page %llu in %s crosses a segment", (unsigned long long)mark->first_entry, path);
        if (!status)
            status = check_pages(verification, task, frame, path);
    }
    if (descriptor >= 0)
        windrow_files.close(descriptor);
    free(path);
    windrow_meter_add(&verification->meter, mark[1].file_offset > mark->file_offset ? mark[1].file_offset - mark->file_offset : 0);
    return status;
}

/* The registered domain is the end of the name, cut where the list of domains says, or at least at a label. */
static bool domain_good(const struct verification *verification, const struct windrow_host *host)
{
    char name[256];
    if (!host->domain_bytes || host->domain_bytes > host->name_bytes)
        return false;
    uint32_t domain_at = host->name_bytes - host->domain_bytes;
    if (domain_at && host->name[domain_at - 1] != '.')
        return false;
    if (!verification->domains_known || host->name_bytes >= sizeof name)
        return true;
    memcpy(name, host->name, host->name_bytes);
    name[host->name_bytes] = 0;
    return windrow_domain(name) == name + domain_at;
}

static enum windrow_status check_hosts(struct verification *verification, uint64_t task)
{
    const struct windrow_store *store = verification->store;
    uint64_t hosts = windrow_store_facts(store)->hosts;
    enum windrow_status status = WINDROW_OK;
    struct windrow_host before = {0};
    for (uint64_t number = 0; !status && number < hosts; number++) {
        struct windrow_host host = windrow_store_host(store, number);
        if (host.first_core != cores_before(verification, host.first_page))
            status = note(verification, task, "host %llu begins with core page %llu, which the core map contradicts", (unsigned long long)number,
                          (unsigned long long)host.first_core);
        if (!status && !domain_good(verification, &host))
            status = note(verification, task, "host %llu (%.*s) has %u bytes of registered domain, which cannot be", (unsigned long long)number,
                          (int)(host.name_bytes < 200 ? host.name_bytes : 200), host.name, host.domain_bytes);
        if (!status && number && before.name_bytes == host.name_bytes && memcmp(before.name, host.name, host.name_bytes) == 0)
            status = note(verification, task, "hosts %llu and %llu have the same name", (unsigned long long)number - 1, (unsigned long long)number);
        before = host;
    }
    return status;
}

static enum windrow_status check_count(struct verification *verification, uint64_t task, const char *what, uint64_t counted, uint64_t said)
{
    if (counted == said)
        return WINDROW_OK;
    return note(verification, task, "the manifest of %s says %llu %s, but there are %llu", verification->path, (unsigned long long)said, what,
                (unsigned long long)counted);
}

static enum windrow_status check_page_table(struct verification *verification)
{
    const struct windrow_store_facts *facts = windrow_store_facts(verification->store);
    uint64_t frames = windrow_store_pages_index(verification->store)->frame_count;
    atomic_store(&verification->unread, 0);
    enum windrow_status status = windrow_crew_run(verification->crew, frames, check_frame, verification);
    if (!status)
        status = check_hosts(verification, frames);
    if (!status)
        status = check_count(verification, frames, "core pages", cores_before(verification, facts->pages), facts->core_pages);
    if (status || verification->unread)
        return status;
    if ((status = check_count(verification, frames, "bytes of keys", verification->key_bytes, facts->key_bytes)))
        return status;
    return check_count(verification, frames, "crawled pages", verification->crawled_pages, facts->crawled_pages);
}

/* ---- Blocks ---- */

static void block_name(const struct verification *verification, enum windrow_block_kind kind, uint64_t block, char *name, size_t capacity)
{
    windrow_layout_block_file(name, capacity, kind, windrow_store_block_record(verification->store, kind, block)->segment);
}

/* Counts a block's links into the degrees of their sources. */
static enum windrow_status count_links(struct verification *verification, uint64_t task, enum windrow_block_kind kind, uint64_t block,
                                       const struct windrow_lists *lists, const char *name)
{
    const struct windrow_store *store = verification->store;
    const struct windrow_block_record *record = windrow_store_block_record(store, kind, block);
    const uint64_t *sources = (const uint64_t *)lists->sources.data;
    const uint32_t *counts = (const uint32_t *)lists->counts.data;
    /* The host of a core target, by its core number: hosts without core pages are passed over. */
    uint64_t host = 0;
    if (kind == WINDROW_BLOCK_CORE)
        host = windrow_store_host_of_page(store, windrow_store_core_page(store, record->first_target));
    for (uint32_t target = 0; target < record->target_count; target++) {
        uint64_t number = record->first_target + target, host_first = 0, host_end = 0;
        if (kind == WINDROW_BLOCK_CORE) {
            while (windrow_store_host(store, host + 1).first_core <= number)
                host++;
            host_first = windrow_store_host(store, host).first_core;
            host_end = windrow_store_host(store, host + 1).first_core;
        }
        for (uint32_t index = 0; index < counts[target]; index++) {
            uint64_t source = *sources++;
            if (kind == WINDROW_BLOCK_CORE && source == number)
                return note(verification, task, "block %llu of %s/%s has core page %llu linking to itself", (unsigned long long)block,
                            verification->path, name, (unsigned long long)number);
            atomic_fetch_add_explicit(&verification->degrees[source], 1, memory_order_relaxed);
            if (source >= host_first && source < host_end)
                atomic_fetch_add_explicit(&verification->inside[source], 1, memory_order_relaxed);
        }
    }
    return WINDROW_OK;
}

static enum windrow_status check_block(void *context, uint64_t task, unsigned worker_number)
{
    struct verification *verification = context;
    struct worker *worker = &verification->workers[worker_number];
    const struct windrow_store *store = verification->store;
    uint64_t core_blocks = windrow_store_block_count(store, WINDROW_BLOCK_CORE);
    enum windrow_block_kind kind = task < core_blocks ? WINDROW_BLOCK_CORE : WINDROW_BLOCK_RIM;
    uint64_t number = kind == WINDROW_BLOCK_CORE ? task : task - core_blocks;
    const struct windrow_block_record *record = windrow_store_block_record(store, kind, number);
    char name[64];
    block_name(verification, kind, number, name, sizeof name);
    enum windrow_status status = stopping(verification);
    if (status)
        return status;
    if (file_missing(verification, name)) {
        atomic_fetch_add(&verification->unread, 1);
        return WINDROW_OK;
    }
    struct windrow_block block;
    status = windrow_store_block_read(store, kind, number, &worker->reader, &block);
    if (!status && (status = windrow_block_lists(&block, record, windrow_store_facts(store)->core_pages, &worker->lists)))
        status = windrow_fail_within(status, "block %llu (%s/%s, byte %llu)", (unsigned long long)number, verification->path, name,
                                     (unsigned long long)record->offset);
    if (status) {
        atomic_fetch_add(&verification->unread, 1);
        status = note_failure(verification, task, status);
    } else {
        const uint64_t *sources = (const uint64_t *)worker->lists.sources.data;
        if (record->link_count)
            verification->ends[kind][number] = (struct block_ends){sources[0], sources[record->link_count - 1], true};
        atomic_fetch_add(&verification->links[kind], record->link_count);
        status = count_links(verification, task, kind, number, &worker->lists, name);
    }
    windrow_meter_add(&verification->meter, record->frame_bytes);
    return status;
}

/* Blocks fill their files without gaps, stay within their segment, and the pieces of a list ascend. */
static enum windrow_status check_neighbours(struct verification *verification, enum windrow_block_kind kind, uint64_t task)
{
    const struct windrow_store *store = verification->store;
    uint64_t pages = windrow_store_facts(store)->pages, count = windrow_store_block_count(store, kind), segment_end = 0;
    enum windrow_status status = WINDROW_OK;
    for (uint64_t block = 0; !status && block < count; block++) {
        const struct windrow_block_record *record = windrow_store_block_record(store, kind, block), *before = block ? record - 1 : NULL;
        bool same_file = before && before->segment == record->segment;
        char name[64];
        block_name(verification, kind, block, name, sizeof name);
        if (!same_file) {
            uint64_t page = ((uint64_t)record->segment + 1) * WINDROW_SEGMENT_PAGES;
            uint64_t end = page < pages ? page : pages, cores = cores_before(verification, end);
            segment_end = kind == WINDROW_BLOCK_CORE ? cores : end - cores;
        }
        if (record->offset != (same_file ? before->offset + before->frame_bytes : 0))
            status = note(verification, task, "block %llu of %s/%s does not begin where the one before ends", (unsigned long long)block,
                          verification->path, name);
        bool last_of_file = block + 1 == count || record[1].segment != record->segment;
        const struct windrow_manifest_file *file = windrow_manifest_file(verification->manifest, name);
        if (!status && last_of_file && (!file || file->bytes != record->offset + record->frame_bytes))
            status = note(verification, task, "the blocks of %s/%s do not end where the file does", verification->path, name);
        if (!status && ((before && before->segment > record->segment) || record->first_target + record->target_count > segment_end ||
                        (last_of_file && record->first_target + record->target_count != segment_end)))
            status = note(verification, task, "block %llu of %s/%s is not of its segment", (unsigned long long)block, verification->path, name);
        bool goes_on = before && (before->flags & WINDROW_BLOCK_PIECE) && !(before->flags & WINDROW_BLOCK_LAST_PIECE);
        const struct block_ends *ends = &verification->ends[kind][block];
        if (!status && goes_on && ends->known && ends[-1].known && ends[-1].last >= ends->first)
            status = note(verification, task, "the pieces of target %llu in %s/%s do not ascend", (unsigned long long)record->first_target,
                          verification->path, name);
    }
    return status;
}

static enum windrow_status check_degrees(struct verification *verification, uint64_t task)
{
    const uint32_t *degrees = windrow_store_degrees(verification->store), *inside = windrow_store_inside_degrees(verification->store);
    uint64_t cores = windrow_store_facts(verification->store)->core_pages;
    for (uint64_t core = 0; core < cores; core++) {
        uint32_t counted = verification->degrees[core], counted_inside = verification->inside[core];
        enum windrow_status status = WINDROW_OK;
        if (!degrees[core] || counted != degrees[core])
            status = note(verification, task, "%s/degrees says that core page %llu has %u links, but there are %u", verification->path,
                          (unsigned long long)core, degrees[core], counted);
        else if (counted_inside != inside[core])
            status = note(verification, task, "%s/inside-degrees says that core page %llu has %u links to core pages of its host, but there are %u",
                          verification->path, (unsigned long long)core, inside[core], counted_inside);
        if (status)
            return status;
    }
    return WINDROW_OK;
}

static enum windrow_status check_blocks(struct verification *verification)
{
    const struct windrow_store_facts *facts = windrow_store_facts(verification->store);
    uint64_t counts[WINDROW_BLOCK_KINDS], all = 0;
    verification->degrees = calloc(facts->core_pages + 1, sizeof *verification->degrees);
    verification->inside = calloc(facts->core_pages + 1, sizeof *verification->inside);
    bool good = verification->degrees && verification->inside;
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++) {
        all += counts[kind] = windrow_store_block_count(verification->store, kind);
        verification->ends[kind] = calloc(counts[kind] + 1, sizeof *verification->ends[kind]);
        good = good && verification->ends[kind];
    }
    if (!good)
        return memory();
    atomic_store(&verification->unread, 0);
    enum windrow_status status = windrow_crew_run(verification->crew, all, check_block, verification);
    for (int kind = 0; !status && kind < WINDROW_BLOCK_KINDS; kind++)
        status = check_neighbours(verification, kind, all + (uint64_t)kind);
    /* With a block unread, sums say nothing. */
    if (status || verification->unread)
        return status;
    uint64_t core_links = verification->links[WINDROW_BLOCK_CORE], links = core_links + verification->links[WINDROW_BLOCK_RIM];
    if ((status = check_count(verification, all + 2, "links", links, facts->links)) ||
        (status = check_count(verification, all + 2, "links between core pages", core_links, facts->core_links)))
        return status;
    return check_degrees(verification, all + 2);
}

/* ---- Aliases ---- */

static enum windrow_status check_aliases(struct verification *verification)
{
    const struct windrow_pages_index *index = windrow_store_alias_index(verification->store);
    struct windrow_pages_frame *frame = &verification->workers[0].frame;
    if (!index->frame_count || file_missing(verification, "aliases.zst"))
        return WINDROW_OK;
    uint64_t pages = windrow_store_facts(verification->store)->pages;
    char *path = windrow_path(verification->path, "aliases.zst");
    int descriptor = path ? windrow_files.open(path, O_RDONLY, 0) : -1;
    enum windrow_status status = WINDROW_OK;
    if (descriptor < 0)
        status = path ? note(verification, 0, "cannot open %s: %s", path, strerror(errno)) : memory();
    for (uint64_t number = 0; !status && descriptor >= 0 && number < index->frame_count; number++) {
        if ((status = stopping(verification)))
            break;
        if ((status = windrow_pages_frame_read(index, number, descriptor, path, true, frame))) {
            status = note_failure(verification, number, status);
            continue;
        }
        for (uint32_t entry = 0; !status && entry < frame->key_count; entry++) {
            const uint8_t *key = frame->keys.data + frame->key_at[entry];
            size_t bytes = frame->key_at[entry + 1] - frame->key_at[entry];
            if (frame->numbers[entry] >= pages || !windrow_key_validate((const char *)key, bytes))
                status = note(verification, number, "entry %llu of %s is not a URL folded into a page", (unsigned long long)(frame->first_entry + entry), path);
        }
        const struct windrow_pages_mark *mark = &index->marks[number];
        const uint8_t *last = frame->keys.data + frame->key_at[frame->key_count - 1];
        if (!status && number + 1 < index->frame_count &&
            windrow_key_compare((const char *)last, frame->key_at[frame->key_count] - frame->key_at[frame->key_count - 1],
                                (const char *)index->keys + mark[1].key_at, (size_t)(mark[2].key_at - mark[1].key_at)) >= 0)
            status = note(verification, number, "the keys of %s do not ascend at entry %llu", path, (unsigned long long)mark[1].first_entry);
    }
    if (descriptor >= 0)
        windrow_files.close(descriptor);
    free(path);
    return status;
}

/* ---- The store ---- */

static uint64_t bytes_to_read(const struct windrow_manifest *manifest)
{
    uint64_t bytes = 0;
    for (size_t file = 0; file < manifest->file_count; file++) {
        const char *name = manifest->files[file].name;
        bool twice = strncmp(name, "links/", 6) == 0 || strncmp(name, "pages/", 6) == 0;
        bytes += manifest->files[file].bytes << twice;
    }
    return bytes;
}

static enum windrow_status verify(struct verification *verification)
{
    enum windrow_status status = check_files(verification);
    tell(verification);
    if (status)
        return status;
    /* The store's reader takes over a manifest of its own. */
    struct windrow_manifest manifest = {0};
    struct windrow_store *store = NULL;
    if ((status = windrow_manifest_read(verification->path, &manifest)) ||
        (status = windrow_store_open_manifest(verification->path, &manifest, &store))) {
        windrow_manifest_free(&manifest);
        /* When a file is damaged, that has been told, and the parts that need it cannot be looked at. */
        if (status == WINDROW_DAMAGED && !verification->total)
            status = note_failure(verification, 0, status);
        else if (status == WINDROW_DAMAGED)
            status = WINDROW_OK;
        tell(verification);
        return status;
    }
    verification->store = store;
    verification->domains_known = strcmp(windrow_store_manifest(store)->domain_library, windrow_domain_version()) == 0;
    enum windrow_status (*const passes[])(struct verification *) = {check_page_table, check_blocks, check_aliases};
    for (size_t pass = 0; !status && pass < sizeof passes / sizeof *passes; pass++) {
        status = passes[pass](verification);
        tell(verification);
    }
    for (unsigned worker = 0; worker < windrow_crew_workers(verification->crew); worker++) {
        windrow_pages_frame_free(&verification->workers[worker].frame);
        windrow_block_reader_free(&verification->workers[worker].reader);
        windrow_lists_free(&verification->workers[worker].lists);
    }
    windrow_store_close(store);
    return status;
}

enum windrow_status windrow_store_verify(const char *path, unsigned threads, void (*found)(void *context, const char *damage),
                                         void *context, const struct windrow_watch *watch)
{
    if (!windrow_file_exists(path))
        return windrow_fail(WINDROW_USAGE, "there is no store at %s", path);
    struct windrow_manifest manifest;
    enum windrow_status status = windrow_manifest_read(path, &manifest);
    if (status == WINDROW_NO)
        return windrow_fail(WINDROW_NO, "the store %s is not finished; run its windrow shard again to go on", path);
    if (status == WINDROW_DAMAGED) {
        found(context, windrow_message());
        return windrow_fail(WINDROW_NO, "the store %s is damaged", path);
    }
    if (status)
        return status;
    static const struct windrow_watch nobody;
    struct verification verification = {.path = path, .manifest = &manifest, .found = found, .context = context};
    pthread_mutex_init(&verification.lock, NULL);
    windrow_meter_start(&verification.meter, watch ? watch : &nobody);
    windrow_meter_stage(&verification.meter, "verifying", "bytes", bytes_to_read(&manifest));
    verification.missing = calloc(manifest.file_count + 1, sizeof *verification.missing);
    status = verification.missing ? windrow_crew_create(threads, &verification.crew) : memory();
    if (!status && !(verification.workers = calloc(windrow_crew_workers(verification.crew), sizeof *verification.workers)))
        status = memory();
    if (!status)
        status = verify(&verification);
    windrow_meter_stage_end(&verification.meter);
    windrow_meter_finish(&verification.meter);
    windrow_crew_destroy(verification.crew);
    for (size_t index = 0; index < verification.damage_count; index++)
        free(verification.damages[index].text);
    free(verification.damages);
    free(verification.workers);
    free(verification.missing);
    free(verification.degrees);
    free(verification.inside);
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
        free(verification.ends[kind]);
    pthread_mutex_destroy(&verification.lock);
    windrow_manifest_free(&manifest);
    if (!status && verification.total)
        status = windrow_fail(WINDROW_NO, "the store %s is damaged", path);
    return status;
}
