/* frames: scratch files made of compressed frames, written front to back and read from any frame on.
 *
 * Batches, parts of the page merge and rewritten links all pass through such files. A frame is
 *   offset  size  what
 *   0       4     bytes after decompression
 *   4       4     bytes of the zstd frame that follows (with content checksum)
 * and the file ends with eight zero bytes in a frame's place. Scratch is read back by the job that wrote it, but a disk
 * may lie: every frame is checked, and a file that was cut between two frames is missed by its end.
 */
#ifndef WINDROW_SHARD_FRAMES_H
#define WINDROW_SHARD_FRAMES_H

#include "base/file.h"

#include <zstd.h>

/* A frame is closed once it holds this much. Small, because a merge keeps one frame of each run open. */
#define WINDROW_FRAME_BYTES (64 * 1024)

struct windrow_frames_writer {
    struct windrow_writer writer;
    struct windrow_buffer raw;        /* the open frame: callers append here, then call windrow_frames_fill() */
    struct windrow_buffer compressed;
    ZSTD_CCtx *compressor;
};

enum windrow_status windrow_frames_writer_open(struct windrow_frames_writer *frames, const char *path);
/* Closes the frame if it is full; *closed (may be NULL) tells. To be called between entries. */
enum windrow_status windrow_frames_fill(struct windrow_frames_writer *frames, bool *closed);
/* Closes the frame unless it is empty. */
enum windrow_status windrow_frames_cut(struct windrow_frames_writer *frames);
/* Where the open frame will begin in the file. */
uint64_t windrow_frames_offset(const struct windrow_frames_writer *frames);
/* Cuts, ends the file, syncs and closes: it is durable but for its name. */
enum windrow_status windrow_frames_writer_finish(struct windrow_frames_writer *frames);
/* The same without a sync: for scratch that no ledger names. */
enum windrow_status windrow_frames_writer_close(struct windrow_frames_writer *frames);
void windrow_frames_writer_abandon(struct windrow_frames_writer *frames);

struct windrow_frames_reader {
    int descriptor;
    char *path;
    uint64_t offset;                  /* of the next frame */
    struct windrow_buffer compressed;
    struct windrow_buffer raw;        /* the current frame; raw.bytes is 0 behind the last one */
    ZSTD_DCtx *decompressor;
};

enum windrow_status windrow_frames_reader_open(struct windrow_frames_reader *frames, const char *path);
void windrow_frames_seek(struct windrow_frames_reader *frames, uint64_t offset);
/* Reads the next frame into `raw`; leaves it empty behind the last one. */
enum windrow_status windrow_frames_next(struct windrow_frames_reader *frames);
void windrow_frames_reader_close(struct windrow_frames_reader *frames);
/* The failure for a frame that does not hold what it should. */
enum windrow_status windrow_frames_damaged(const struct windrow_frames_reader *frames);

#endif
