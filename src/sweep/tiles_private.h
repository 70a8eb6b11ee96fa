/* What the writing (tiles_build.c) and the reading (tiles.c) of tiles share. Nobody else includes this. */
#ifndef WINDROW_SWEEP_TILES_PRIVATE_H
#define WINDROW_SWEEP_TILES_PRIVATE_H

#include "sweep/tiles.h"

#include <stddef.h>
#include <xxhash.h>

#define WINDROW_TILES_MAGIC "windrow tiles 01"

struct windrow_tiles_header {
    char magic[16];
    uint64_t stripes;
    uint64_t core_blocks;
    uint64_t rim_blocks;
    uint64_t fingerprint;
    uint64_t frame_bytes;
    uint64_t checksum;
};
_Static_assert(sizeof(struct windrow_tiles_header) == 64, "the header of an index is 64 bytes");

/* Of an index in memory: the header's bytes before the checksum, and all behind it, one seeding the other. */
static inline uint64_t windrow_tiles_index_checksum(const uint8_t *index, uint64_t bytes)
{
    uint64_t head = XXH3_64bits(index, offsetof(struct windrow_tiles_header, checksum));
    return XXH3_64bits_withSeed(index + sizeof(struct windrow_tiles_header), bytes - sizeof(struct windrow_tiles_header), head);
}

/* Files by number: the diagonal, then the core's, then the rim's. The caller frees the path; NULL when memory is out. */
char *windrow_tiles_file_path(const char *directory, unsigned stripes, unsigned file);

#endif
