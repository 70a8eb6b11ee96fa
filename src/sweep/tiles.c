#include "sweep/tiles.h"

#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <string.h>
#include <xxhash.h>
#include <zstd.h>

#include "sweep/tiles_private.h"

/* ---- Stripes ------------------------------------------------------------------------------- */

void windrow_stripes_cut(const struct windrow_web *web, unsigned wanted, struct windrow_stripes *stripes)
{
    uint64_t blocks = web->block_count[WINDROW_BLOCK_CORE];
    *stripes = (struct windrow_stripes){.count = 1};
    for (uint64_t block = 1; block < blocks && stripes->count < wanted; block++) {
        const struct windrow_block_record *record = web->record(web->context, WINDROW_BLOCK_CORE, block);
        const struct windrow_block_record *before = web->record(web->context, WINDROW_BLOCK_CORE, block - 1);
        /* A list in pieces stays together. */
        if (before->first_target + before->target_count > record->first_target || before->first_target == record->first_target)
            continue;
        /* A border belongs where the block behind it would reach further beyond the even share than the one before falls short of it. */
        double share = (double)web->core_pages / wanted * stripes->count;
        uint64_t end = record->first_target + record->target_count;
        if ((double)end - share <= share - (double)record->first_target)
            continue;
        stripes->first_block[stripes->count] = block;
        stripes->first_page[stripes->count++] = record->first_target;
    }
    stripes->first_block[stripes->count] = blocks;
    stripes->first_page[stripes->count] = web->core_pages;
}

uint64_t windrow_stripes_pages_most(const struct windrow_stripes *stripes)
{
    uint64_t most = 0;
    for (unsigned stripe = 0; stripe < stripes->count; stripe++)
        if (stripes->first_page[stripe + 1] - stripes->first_page[stripe] > most)
            most = stripes->first_page[stripe + 1] - stripes->first_page[stripe];
    return most;
}

/* ---- Files --------------------------------------------------------------------------------- */

/* Files by number: the diagonal, then the core's, then the rim's. */
char *windrow_tiles_file_path(const char *directory, unsigned stripes, unsigned file)
{
    if (file == 0)
        return windrow_path(directory, "tiles-diagonal");
    return file <= stripes ? windrow_path(directory, "tiles-core-%u", file - 1) : windrow_path(directory, "tiles-rim-%u", file - 1 - stripes);
}

uint64_t windrow_tiles_memory_bytes(const struct windrow_web *web, unsigned stripes)
{
    return ((stripes + 1) * web->block_count[WINDROW_BLOCK_CORE] + stripes * web->block_count[WINDROW_BLOCK_RIM]) * sizeof(struct windrow_block_record);
}

enum windrow_status windrow_tiles_remove(const char *directory)
{
    enum windrow_status status = WINDROW_OK;
    for (unsigned file = 0; !status && file <= 2 * WINDROW_STRIPES_MOST + 1; file++) {
        char *path = file <= 2 * WINDROW_STRIPES_MOST ? windrow_tiles_file_path(directory, WINDROW_STRIPES_MOST, file) : windrow_path(directory, "tiles-index");
        status = path ? windrow_file_remove(path) : windrow_fail(WINDROW_RESOURCE, "out of memory while removing tiles");
        free(path);
    }
    return status;
}

/* ---- Reading ------------------------------------------------------------------------------- */

struct part {
    const struct windrow_tiles_private *own;
    unsigned file[WINDROW_BLOCK_KINDS];
};

struct windrow_tiles_private {
    const struct windrow_web *web;
    uint8_t *index;
    uint64_t core_blocks, rim_blocks;
    unsigned file_count;
    int descriptors[2 * WINDROW_STRIPES_MOST + 1];
    char *paths[2 * WINDROW_STRIPES_MOST + 1];
    const struct windrow_block_record *records[2 * WINDROW_STRIPES_MOST + 1];
    struct part parts[WINDROW_STRIPES_MOST + 1];
};

static uint64_t part_host_first_core(const void *context, uint64_t host)
{
    const struct windrow_web *web = ((const struct part *)context)->own->web;
    return web->host_first_core(web->context, host);
}

static const struct windrow_block_record *part_record(const void *context, enum windrow_block_kind kind, uint64_t block)
{
    const struct part *part = context;
    return &part->own->records[part->file[kind]][block];
}

static enum windrow_status part_read(const void *context, enum windrow_block_kind kind, uint64_t block,
                                     struct windrow_block_reader *reader, struct windrow_block *out)
{
    const struct part *part = context;
    unsigned file = part->file[kind];
    const struct windrow_block_record *record = &part->own->records[file][block];
    if (record->link_count == 0) {
        *out = (struct windrow_block){.first_target = record->first_target, .target_count = record->target_count, .flags = record->flags};
        return WINDROW_OK;
    }
    reader->frame.bytes = reader->payload.bytes = 0;
    enum windrow_status status = windrow_buffer_reserve(&reader->frame, record->frame_bytes);
    if (!status)
        status = windrow_buffer_reserve(&reader->payload, record->payload_bytes);
    if (!status)
        status = windrow_file_read_at(part->own->descriptors[file], part->own->paths[file], reader->frame.data, record->frame_bytes, record->offset);
    if (status)
        return status;
    bool good = XXH3_64bits(reader->frame.data, record->frame_bytes) == record->checksum;
    if (good) {
        size_t bytes = ZSTD_decompress(reader->payload.data, record->payload_bytes, reader->frame.data, record->frame_bytes);
        good = !ZSTD_isError(bytes) && bytes == record->payload_bytes;
    }
    if (!good)
        return windrow_fail(WINDROW_DAMAGED, "%s is damaged at byte %llu; rank again with --fresh", part->own->paths[file],
                            (unsigned long long)record->offset);
    return windrow_block_parse(reader->payload.data, record->payload_bytes, record, out);
}

static struct windrow_web part_web(const struct part *part)
{
    struct windrow_web web = *part->own->web;
    web.context = part;
    web.host_first_core = part_host_first_core;
    web.record = part_record;
    web.read = part_read;
    return web;
}

static enum windrow_status open_files(struct windrow_tiles_private *own, unsigned stripes, const char *directory)
{
    for (unsigned file = 0; file < own->file_count; file++) {
        if (!(own->paths[file] = windrow_tiles_file_path(directory, stripes, file)))
            return windrow_fail(WINDROW_RESOURCE, "out of memory while opening tiles");
        if ((own->descriptors[file] = windrow_files.open(own->paths[file], O_RDONLY, 0)) < 0)
            return windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open %s", own->paths[file]);
    }
    return WINDROW_OK;
}

/* The records of a part must be those of the web but for what its links take. */
static bool records_fit(const struct windrow_web *web, enum windrow_block_kind kind, const struct windrow_block_record *records)
{
    static const uint32_t pieces = WINDROW_BLOCK_PIECE | WINDROW_BLOCK_LAST_PIECE;
    for (uint64_t block = 0; block < web->block_count[kind]; block++) {
        const struct windrow_block_record *whole = web->record(web->context, kind, block), *part = &records[block];
        if (part->first_target != whole->first_target || part->target_count != whole->target_count || part->link_count > whole->link_count ||
            (part->flags & pieces) != (whole->flags & pieces))
            return false;
    }
    return true;
}

static uint64_t count_pieces(const struct windrow_web *web)
{
    uint64_t most = 0;
    for (int kind = 0; kind < WINDROW_BLOCK_KINDS; kind++)
        for (uint64_t block = 0, pieces = 0; block < web->block_count[kind]; block++) {
            uint32_t flags = web->record(web->context, kind, block)->flags;
            pieces = flags & WINDROW_BLOCK_PIECE ? pieces + 1 : 0;
            most = pieces > most ? pieces : most;
            if (flags & WINDROW_BLOCK_LAST_PIECE)
                pieces = 0;
        }
    return most;
}

static enum windrow_status read_index(struct windrow_tiles *tiles, const char *path, uint64_t fingerprint, uint64_t checksum)
{
    struct windrow_tiles_private *own = tiles->own;
    const struct windrow_web *web = own->web;
    struct windrow_buffer buffer = {0};
    enum windrow_status status = windrow_file_load(path, windrow_tiles_memory_bytes(web, WINDROW_STRIPES_MOST) + 4096, &buffer);
    if (status)
        return status == WINDROW_RESOURCE ? status : WINDROW_DAMAGED;
    own->index = buffer.data;
    struct windrow_tiles_header header;
    if (buffer.bytes < sizeof header)
        goto damaged;
    memcpy(&header, buffer.data, sizeof header);
    if (memcmp(header.magic, WINDROW_TILES_MAGIC, sizeof header.magic) || header.checksum != checksum || header.fingerprint != fingerprint ||
        windrow_tiles_index_checksum(buffer.data, buffer.bytes) != checksum || header.stripes < 1 || header.stripes > WINDROW_STRIPES_MOST)
        goto damaged;
    unsigned stripes = (unsigned)header.stripes;
    if (buffer.bytes != sizeof header + (stripes + 1) * sizeof(uint64_t) + windrow_tiles_memory_bytes(web, stripes))
        goto damaged;
    uint64_t core_blocks = web->block_count[WINDROW_BLOCK_CORE], rim_blocks = web->block_count[WINDROW_BLOCK_RIM];
    tiles->stripes.count = stripes;
    tiles->bytes = header.frame_bytes + buffer.bytes;
    memcpy(tiles->stripes.first_block, buffer.data + sizeof header, (stripes + 1) * sizeof(uint64_t));
    for (unsigned stripe = 0; stripe <= stripes; stripe++) {
        uint64_t block = tiles->stripes.first_block[stripe];
        if (stripe == stripes ? block != core_blocks : block >= core_blocks + (core_blocks == 0))
            goto damaged;
        tiles->stripes.first_page[stripe] = block == core_blocks ? web->core_pages : web->record(web->context, WINDROW_BLOCK_CORE, block)->first_target;
        if (stripe && block < tiles->stripes.first_block[stripe - 1])
            goto damaged;
    }
    own->file_count = 2 * stripes + 1;
    const struct windrow_block_record *record = (const void *)(buffer.data + sizeof header + (stripes + 1) * sizeof(uint64_t));
    for (unsigned file = 0; file < own->file_count; file++) {
        own->records[file] = record;
        enum windrow_block_kind kind = file <= stripes ? WINDROW_BLOCK_CORE : WINDROW_BLOCK_RIM;
        record += kind == WINDROW_BLOCK_CORE ? core_blocks : rim_blocks;
        if (!records_fit(web, kind, own->records[file]))
            goto damaged;
    }
    return WINDROW_OK;
damaged:
    return windrow_fail(WINDROW_DAMAGED, "%s does not belong to these tiles", path);
}

enum windrow_status windrow_tiles_open(const struct windrow_web *web, const char *directory, uint64_t fingerprint, uint64_t checksum,
                                       struct windrow_tiles **out)
{
    *out = NULL;
    struct windrow_tiles *tiles = calloc(1, sizeof *tiles);
    char *path = windrow_path(directory, "tiles-index");
    enum windrow_status status = WINDROW_OK;
    if (!tiles || !path || !(tiles->own = calloc(1, sizeof *tiles->own))) {
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while opening tiles");
        goto out;
    }
    struct windrow_tiles_private *own = tiles->own;
    own->web = web;
    for (unsigned file = 0; file <= 2 * WINDROW_STRIPES_MOST; file++)
        own->descriptors[file] = -1;
    if ((status = read_index(tiles, path, fingerprint, checksum)))
        goto out;
    unsigned stripes = tiles->stripes.count;
    if ((status = open_files(own, stripes, directory)))
        goto out;
    for (unsigned part = 0; part <= stripes; part++)
        own->parts[part] = (struct part){own, {part, part + stripes}};
    tiles->diagonal = part_web(&own->parts[0]);
    for (unsigned stripe = 0; stripe < stripes; stripe++)
        tiles->columns[stripe] = part_web(&own->parts[stripe + 1]);
    tiles->pieces_most = count_pieces(web);
out:
    free(path);
    if (status) {
        windrow_tiles_close(tiles);
        return status;
    }
    *out = tiles;
    return WINDROW_OK;
}

void windrow_tiles_close(struct windrow_tiles *tiles)
{
    if (!tiles)
        return;
    struct windrow_tiles_private *own = tiles->own;
    for (unsigned file = 0; own && file <= 2 * WINDROW_STRIPES_MOST; file++) {
        if (own->descriptors[file] >= 0)
            windrow_files.close(own->descriptors[file]);
        free(own->paths[file]);
    }
    if (own)
        free(own->index);
    free(own);
    free(tiles);
}

static enum windrow_status read_part(const struct windrow_web *part, enum windrow_block_kind kind, struct windrow_block_reader *reader)
{
    enum windrow_status status = WINDROW_OK;
    struct windrow_block block;
    for (uint64_t i = 0; !status && i < part->block_count[kind]; i++)
        status = part->read(part->context, kind, i, reader, &block);
    return status;
}

enum windrow_status windrow_tiles_read_back(const struct windrow_tiles *tiles)
{
    struct windrow_block_reader reader = {.decompressor = NULL};
    enum windrow_status status = read_part(&tiles->diagonal, WINDROW_BLOCK_CORE, &reader);
    for (unsigned stripe = 0; stripe < tiles->stripes.count; stripe++)
        for (int kind = 0; !status && kind < WINDROW_BLOCK_KINDS; kind++)
            status = read_part(&tiles->columns[stripe], kind, &reader);
    windrow_block_reader_free(&reader);
    return status;
}
