/* tiles: the links of a web cut by stripes of their sources, for sweeps whose vectors are larger than memory.
 *
 * The core pages are cut into stripes of consecutive pages, at borders of core blocks. The files of a directory then
 * hold every block of the web again, in parts that have the same targets:
 *   tiles-diagonal    core blocks, with the sources that lie in the stripe of the block's targets
 *   tiles-core-J      core blocks of other stripes, with the sources that lie in stripe J
 *   tiles-rim-J       rim blocks, with the sources that lie in stripe J
 *   tiles-index       where everything stands
 * Each of these is seen as a web of its own, with the blocks, targets and pieces of the whole web.
 *
 * A frame is one zstd frame with the payload of a block (store/FORMAT.md); a part without links has none. The index is
 * 64 bytes ("windrow tiles 01", stripes, core blocks, rim blocks, fingerprint, bytes of all frames,
 * XXH3-64 of all behind these 8 bytes, seeded by that of those before), the first block of each stripe and one more (8 bytes each), then the
 * records (struct windrow_block_record) of the diagonal, of each core file, of each rim file.
 *
 * Threads: open tiles may be read by any threads, a reader each.
 */
#ifndef WINDROW_SWEEP_TILES_H
#define WINDROW_SWEEP_TILES_H

#include "base/crew.h"
#include "base/meter.h"
#include "sweep/web.h"

enum { WINDROW_STRIPES_MOST = 64 };

/* Where stripes begin: blocks and pages, one more than there are stripes. */
struct windrow_stripes {
    unsigned count;
    uint64_t first_block[WINDROW_STRIPES_MOST + 1];
    uint64_t first_page[WINDROW_STRIPES_MOST + 1];
};

/* Cuts the core into at most `wanted` (1 to WINDROW_STRIPES_MOST) stripes, as even as its blocks allow. */
void windrow_stripes_cut(const struct windrow_web *web, unsigned wanted, struct windrow_stripes *stripes);
/* Pages of the largest one. */
uint64_t windrow_stripes_pages_most(const struct windrow_stripes *stripes);

struct windrow_tiles {
    struct windrow_stripes stripes;
    uint64_t bytes;                                  /* on disk */
    uint64_t pieces_most;                            /* of a list */
    struct windrow_web diagonal;
    struct windrow_web columns[WINDROW_STRIPES_MOST];  /* sources of one stripe: core blocks of other stripes, all rim blocks */
    struct windrow_tiles_private *own;
};

/* Memory that the index of open tiles takes. */
uint64_t windrow_tiles_memory_bytes(const struct windrow_web *web, unsigned stripes);

/* Writes the tiles of a web into a directory; what stands there under their names is replaced. When this returns they are
 * durable. `fingerprint` is the caller's mark of the web, `checksum` receives the index's own. The same web and stripes give the
 * same bytes for any crew. `meter` (may be NULL) counts links. WINDROW_RESOURCE (disk), WINDROW_DAMAGED, WINDROW_STOPPED. */
enum windrow_status windrow_tiles_build(const struct windrow_web *web, struct windrow_crew *crew, const struct windrow_stripes *stripes,
                                        const char *directory, uint64_t fingerprint, uint64_t *checksum, struct windrow_meter *meter);

/* Opens what was built. The web must outlive the tiles. WINDROW_DAMAGED when the index is not the one of this
 * web and checksum; frames are checked when they are read. */
enum windrow_status windrow_tiles_open(const struct windrow_web *web, const char *directory, uint64_t fingerprint, uint64_t checksum,
                                       struct windrow_tiles **tiles);
void windrow_tiles_close(struct windrow_tiles *tiles); /* NULL is fine */

/* Reads every frame against its checksum. WINDROW_DAMAGED at the first that is wrong. */
enum windrow_status windrow_tiles_read_back(const struct windrow_tiles *tiles);

/* Removes the files. */
enum windrow_status windrow_tiles_remove(const char *directory);

#endif
