/* How tiles are made: blocks are read in order, a batch at a time; the crew cuts each by the stripes of its sources, and the
 * parts are appended to their files in block order. So the bytes do not depend on the crew. */
#include "sweep/tiles_private.h"

#include <stdlib.h>
#include <string.h>
#include <zstd.h>

/* Blocks cut at a time: each takes some MiB, and memory is what is short here. */
enum { BATCH_BLOCKS = 4, FILES_MOST = 2 * WINDROW_STRIPES_MOST + 1 };

/* What it takes to cut a block. */
struct cutter {
    ZSTD_CCtx *compressor;
    struct windrow_block_reader reader;
    struct windrow_lists lists;
    struct windrow_buffer sources, counts;          /* of the part at work */
    struct windrow_buffer positions;                /* uint64_t a target: its next source; then where its near sources begin and end */
    struct windrow_buffer payload;
};

/* A block that was cut, until it is written. */
struct cut {
    struct windrow_buffer frames[WINDROW_STRIPES_MOST];
    struct windrow_block_record records[WINDROW_STRIPES_MOST]; /* by stripe of the sources */
};

struct build {
    const struct windrow_web *web;
    const struct windrow_stripes *stripes;
    struct windrow_meter *meter;
    enum windrow_block_kind kind;
    uint64_t first;                                 /* block of the batch */
    struct cut cuts[BATCH_BLOCKS];
    struct cutter cutters[BATCH_BLOCKS];
    struct windrow_writer writers[FILES_MOST];
    struct windrow_block_record *records[FILES_MOST];
};

static unsigned stripe_of_block(const struct windrow_stripes *stripes, uint64_t block)
{
    unsigned stripe = 0;
    while (stripe + 1 < stripes->count && block >= stripes->first_block[stripe + 1])
        stripe++;
    return stripe;
}

/* Near sources are those of the same host in the same block. */
static void find_near(const struct windrow_web *web, const struct windrow_block_record *record, uint64_t *near_first, uint64_t *near_end)
{
    uint64_t first = record->first_target, end = first + record->target_count, low = 0, high = web->host_count;
    while (high - low > 1) {
        uint64_t middle = low + (high - low) / 2;
        if (web->host_first_core(web->context, middle) <= first)
            low = middle;
        else
            high = middle;
    }
    uint64_t host_first = web->host_first_core(web->context, low), host_end = web->host_first_core(web->context, low + 1);
    for (uint64_t target = first; target < end; target++) {
        while (host_end <= target) {
            host_first = host_end;
            host_end = web->host_first_core(web->context, ++low + 1);
        }
        near_first[target - first] = host_first > first ? host_first : first;
        near_end[target - first] = host_end < end ? host_end : end;
    }
}

/* Takes the sources below `end` from every list. */
static enum windrow_status take_sources(struct cutter *cutter, uint32_t targets, uint64_t end, uint64_t *links)
{
    const uint64_t *sources = (const void *)cutter->lists.sources.data;
    const uint32_t *list_counts = (const void *)cutter->lists.counts.data;
    uint64_t *next = (void *)cutter->positions.data;
    cutter->sources.bytes = cutter->counts.bytes = 0;
    enum windrow_status status = windrow_buffer_reserve(&cutter->counts, targets * sizeof(uint32_t));
    if (!status)
        status = windrow_buffer_reserve(&cutter->sources, cutter->lists.sources.bytes + sizeof(uint64_t));
    if (status)
        return status;
    uint64_t *taken = (void *)cutter->sources.data, count = 0, list_end = 0;
    for (uint32_t t = 0; t < targets; t++) {
        uint64_t before = count;
        list_end += list_counts[t];
        for (; next[t] < list_end && sources[next[t]] < end; next[t]++)
            taken[count++] = sources[next[t]];
        ((uint32_t *)(void *)cutter->counts.data)[t] = (uint32_t)(count - before);
    }
    *links = count;
    return WINDROW_OK;
}

static enum windrow_status make_frame(const struct build *build, struct cutter *cutter, const struct windrow_block_record *whole, bool diagonal,
                                      uint64_t links, struct windrow_block_record *record, struct windrow_buffer *frame)
{
    static const uint32_t pieces = WINDROW_BLOCK_PIECE | WINDROW_BLOCK_LAST_PIECE;
    uint64_t *positions = (void *)cutter->positions.data;
    frame->bytes = cutter->payload.bytes = 0;
    *record = (struct windrow_block_record){.first_target = whole->first_target, .target_count = whole->target_count, .link_count = links,
                                            .flags = whole->flags & pieces};
    if (links == 0)
        return WINDROW_OK;
    if (diagonal)
        find_near(build->web, whole, positions + whole->target_count, positions + 2 * (uint64_t)whole->target_count);
    /* Beside the diagonal no source is near: such a part is coded as a block of the rim is. */
    const struct windrow_block_input input = {
        .kind = diagonal ? WINDROW_BLOCK_CORE : WINDROW_BLOCK_RIM,
        .first_target = whole->first_target,
        .target_count = whole->target_count,
        .flags = record->flags,
        .sources = (const void *)cutter->sources.data,
        .counts = (const void *)cutter->counts.data,
        .near_first = positions + whole->target_count,
        .near_end = positions + 2 * (uint64_t)whole->target_count,
    };
    enum windrow_status status = windrow_block_encode(&input, &cutter->payload);
    size_t bound = ZSTD_compressBound(cutter->payload.bytes);
    if (!status)
        status = windrow_buffer_reserve(frame, bound);
    if (status)
        return status;
    frame->bytes = ZSTD_compressCCtx(cutter->compressor, frame->data, bound, cutter->payload.data, cutter->payload.bytes, 1);
    if (ZSTD_isError(frame->bytes))
        return windrow_fail(WINDROW_RESOURCE, "cannot compress a tile: %s", ZSTD_getErrorName(frame->bytes));
    record->flags = windrow_block_payload_flags(cutter->payload.data);
    record->payload_bytes = (uint32_t)cutter->payload.bytes;
    record->frame_bytes = (uint32_t)frame->bytes;
    record->checksum = XXH3_64bits(frame->data, frame->bytes);
    return WINDROW_OK;
}

static enum windrow_status cut_task(void *context, uint64_t task, unsigned worker)
{
    (void)worker;
    struct build *build = context;
    const struct windrow_web *web = build->web;
    struct cutter *cutter = &build->cutters[task];
    struct cut *out = &build->cuts[task];
    uint64_t block = build->first + task, links;
    const struct windrow_block_record *record = web->record(web->context, build->kind, block);
    struct windrow_block decoded;
    enum windrow_status status = web->read(web->context, build->kind, block, &cutter->reader, &decoded);
    if (!status)
        status = windrow_block_lists(&decoded, record, web->core_pages, &cutter->lists);
    cutter->positions.bytes = 0;
    if (!status)
        status = windrow_buffer_reserve(&cutter->positions, 3 * (size_t)record->target_count * sizeof(uint64_t));
    if (status)
        return status;
    uint64_t *next = (void *)cutter->positions.data, begin = 0;
    for (uint32_t t = 0; t < record->target_count; t++) {
        next[t] = begin;
        begin += ((const uint32_t *)(const void *)cutter->lists.counts.data)[t];
    }
    if (!cutter->compressor && !(cutter->compressor = ZSTD_createCCtx()))
        return windrow_fail(WINDROW_RESOURCE, "out of memory while writing tiles");
    bool core = build->kind == WINDROW_BLOCK_CORE;
    unsigned own_stripe = core ? stripe_of_block(build->stripes, block) : 0;
    for (unsigned stripe = 0; stripe < build->stripes->count; stripe++) {
        if ((status = take_sources(cutter, record->target_count, build->stripes->first_page[stripe + 1], &links)))
            return status;
        if ((status = make_frame(build, cutter, record, core && stripe == own_stripe, links, &out->records[stripe], &out->frames[stripe])))
            return status;
    }
    return WINDROW_OK;
}

static enum windrow_status append_block(struct build *build, uint64_t block, struct cut *cut)
{
    unsigned stripes = build->stripes->count, own_stripe = stripe_of_block(build->stripes, block);
    bool core = build->kind == WINDROW_BLOCK_CORE;
    for (unsigned stripe = 0; stripe < stripes; stripe++) {
        struct windrow_block_record *record = &cut->records[stripe];
        unsigned file = core ? 1 + stripe : 1 + stripes + stripe;
        if (core && stripe == own_stripe) {
            /* Its own stripe's file has an empty part instead. */
            build->records[file][block] = (struct windrow_block_record){.first_target = record->first_target, .target_count = record->target_count,
                                                                        .flags = record->flags & ~(uint32_t)WINDROW_BLOCK_WIDE};
            file = 0;
        }
        record->offset = build->writers[file].written_bytes;
        build->records[file][block] = *record;
        enum windrow_status status = windrow_writer_append(&build->writers[file], cut->frames[stripe].data, cut->frames[stripe].bytes);
        if (status)
            return status;
    }
    return WINDROW_OK;
}

static enum windrow_status cut_kind(struct build *build, enum windrow_block_kind kind, struct windrow_crew *crew)
{
    const struct windrow_web *web = build->web;
    enum windrow_status status = WINDROW_OK;
    build->kind = kind;
    for (build->first = 0; !status && build->first < web->block_count[kind]; build->first += BATCH_BLOCKS) {
        uint64_t left = web->block_count[kind] - build->first, count = left < BATCH_BLOCKS ? left : BATCH_BLOCKS, links = 0;
        status = windrow_crew_run(crew, count, cut_task, build);
        for (uint64_t task = 0; !status && task < count; task++) {
            status = append_block(build, build->first + task, &build->cuts[task]);
            links += web->record(web->context, kind, build->first + task)->link_count;
        }
        if (build->meter) {
            windrow_meter_add(build->meter, links);
            if (!status && windrow_meter_stopping(build->meter))
                status = windrow_fail(WINDROW_STOPPED, "stopped while cutting the links into tiles; run the same command again to begin that anew");
        }
    }
    return status;
}

static enum windrow_status write_index(const char *directory, struct windrow_buffer *index, uint64_t frame_bytes, uint64_t *checksum)
{
    struct windrow_tiles_header *header = (void *)index->data;
    header->frame_bytes = frame_bytes;
    header->checksum = *checksum = windrow_tiles_index_checksum(index->data, index->bytes);
    char *path = windrow_path(directory, "tiles-index");
    if (!path)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while writing tiles");
    struct windrow_writer writer = {.descriptor = -1};
    enum windrow_status status = windrow_writer_open(&writer, path, false);
    if (!status)
        status = windrow_writer_append(&writer, index->data, index->bytes);
    if (!status)
        status = windrow_writer_finish(&writer, NULL);
    windrow_writer_abandon(&writer);
    free(path);
    return status ? status : windrow_directory_sync(directory);
}

static enum windrow_status begin(struct build *build, const char *directory, uint64_t fingerprint, struct windrow_buffer *index)
{
    const struct windrow_web *web = build->web;
    unsigned stripes = build->stripes->count;
    uint64_t core_blocks = web->block_count[WINDROW_BLOCK_CORE], rim_blocks = web->block_count[WINDROW_BLOCK_RIM];
    const struct windrow_tiles_header header = {.magic = WINDROW_TILES_MAGIC, .stripes = stripes, .core_blocks = core_blocks,
                                                .rim_blocks = rim_blocks, .fingerprint = fingerprint};
    uint64_t record_bytes = windrow_tiles_memory_bytes(web, stripes);
    enum windrow_status status = windrow_buffer_append(index, &header, sizeof header);
    if (!status)
        status = windrow_buffer_append(index, build->stripes->first_block, (stripes + 1) * sizeof(uint64_t));
    if (!status)
        status = windrow_buffer_reserve(index, record_bytes);
    if (status)
        return status;
    struct windrow_block_record *record = (void *)(index->data + index->bytes);
    memset(record, 0, record_bytes);
    index->bytes += record_bytes;
    for (unsigned file = 0; file < 2 * stripes + 1; file++) {
        build->records[file] = record;
        record += file <= stripes ? core_blocks : rim_blocks;
        char *path = windrow_tiles_file_path(directory, stripes, file);
        status = path ? windrow_writer_open(&build->writers[file], path, false) : windrow_fail(WINDROW_RESOURCE, "out of memory while writing tiles");
        free(path);
        if (status)
            return status;
    }
    return WINDROW_OK;
}

static void build_free(struct build *build)
{
    for (int i = 0; i < BATCH_BLOCKS; i++) {
        struct cutter *cutter = &build->cutters[i];
        for (int stripe = 0; stripe < WINDROW_STRIPES_MOST; stripe++)
            windrow_buffer_free(&build->cuts[i].frames[stripe]);
        ZSTD_freeCCtx(cutter->compressor);
        windrow_block_reader_free(&cutter->reader);
        windrow_lists_free(&cutter->lists);
        windrow_buffer_free(&cutter->sources);
        windrow_buffer_free(&cutter->counts);
        windrow_buffer_free(&cutter->positions);
        windrow_buffer_free(&cutter->payload);
    }
    for (int file = 0; file < FILES_MOST; file++)
        windrow_writer_abandon(&build->writers[file]);
    free(build);
}

enum windrow_status windrow_tiles_build(const struct windrow_web *web, struct windrow_crew *crew, const struct windrow_stripes *stripes,
                                        const char *directory, uint64_t fingerprint, uint64_t *checksum, struct windrow_meter *meter)
{
    struct build *build = calloc(1, sizeof *build);
    struct windrow_buffer index = {0};
    if (!build)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while writing tiles");
    build->web = web;
    build->stripes = stripes;
    build->meter = meter;
    for (int file = 0; file < FILES_MOST; file++)
        build->writers[file].descriptor = -1;
    enum windrow_status status = begin(build, directory, fingerprint, &index);
    for (int kind = 0; !status && kind < WINDROW_BLOCK_KINDS; kind++)
        status = cut_kind(build, kind, crew);
    uint64_t frame_bytes = 0;
    for (unsigned file = 0; !status && file < 2 * stripes->count + 1; file++) {
        frame_bytes += build->writers[file].written_bytes;
        status = windrow_writer_finish(&build->writers[file], NULL);
    }
    if (!status)
        status = write_index(directory, &index, frame_bytes, checksum);
    windrow_buffer_free(&index);
    build_free(build);
    return status;
}
