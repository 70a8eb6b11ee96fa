/* stream: blocks of one kind in order, wave by wave, read ahead and worked on by a crew.
 *
 * The blocks of a wave are handed to the crew's workers, one block a task. While the last of them are
 * being worked on, free workers read and decompress the next wave's blocks. Between two waves the barrier
 * is called in the caller's thread: what the workers wrote is visible there, and the other way round.
 *
 * The cut into waves depends on nothing but the number of blocks; so do results.
 */
#ifndef WINDROW_SWEEP_STREAM_H
#define WINDROW_SWEEP_STREAM_H

#include "base/crew.h"
#include "sweep/kernel.h"
#include "sweep/web.h"

enum { WINDROW_WAVE_BLOCKS_MOST = 16 };

struct windrow_stream_job {
    void *context;
    /* Work on a block whose numbers are loaded in `kernel`. `slot` is its place in the wave. */
    enum windrow_status (*work)(void *context, uint64_t block, unsigned slot, struct windrow_kernel *kernel, unsigned worker);
    /* The blocks [first, end) are done. Anything but WINDROW_OK ends the streaming. */
    enum windrow_status (*barrier)(void *context, uint64_t first, uint64_t end);
};

struct windrow_streamer;

/* What streaming needs again and again. The web and the crew must outlive it. */
enum windrow_status windrow_streamer_create(const struct windrow_web *web, struct windrow_crew *crew, struct windrow_streamer **streamer);
void windrow_streamer_destroy(struct windrow_streamer *streamer); /* NULL is fine */

/* Blocks in a wave of this kind: 1 to WINDROW_WAVE_BLOCKS_MOST. */
unsigned windrow_streamer_wave_blocks(const struct windrow_streamer *streamer, enum windrow_block_kind kind);

/* Streams the blocks from `first` (the first of a wave) to the last. */
enum windrow_status windrow_streamer_run(struct windrow_streamer *streamer, enum windrow_block_kind kind, uint64_t first,
                                         const struct windrow_stream_job *job);

/* The same for the blocks [first, end), of another web with the same blocks (tiles.h): waves begin at `first`. */
enum windrow_status windrow_streamer_run_part(struct windrow_streamer *streamer, const struct windrow_web *web, enum windrow_block_kind kind,
                                              uint64_t first, uint64_t end, const struct windrow_stream_job *job);

#endif
