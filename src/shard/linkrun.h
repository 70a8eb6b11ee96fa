/* linkrun: links sorted by (target, source), as a scratch file.
 *
 * A batch writes one in its local ids; the link merge rewrites it to page ids (targets) and core numbers
 * (sources) and reads it segment by segment. An entry holds some of a target's sources, ascending:
 *   varint  target − target of the entry before (the target itself at the beginning of a frame)
 *   varint  number of sources × 2 + (1 if the next entry goes on with this target)
 *   varint  zigzag of first source − first source of the entry before (0 before the first of a frame)
 *   varint  … source − source before − 1
 * An entry has at most WINDROW_LINKRUN_SOURCES sources, so that a reader's memory is bounded however
 * popular a page is.
 */
#ifndef WINDROW_SHARD_LINKRUN_H
#define WINDROW_SHARD_LINKRUN_H

#include "shard/frames.h"

#define WINDROW_LINKRUN_SOURCES 4096

struct windrow_linkrun_writer {
    struct windrow_frames_writer frames;
    uint64_t last_target;
    uint64_t last_first;
};

enum windrow_status windrow_linkrun_writer_open(struct windrow_linkrun_writer *run, const char *path);
/* Writes a target's sources (count ≥ 1, ascending, distinct). `more`: the next call goes on with this target.
 * Sources are handed over in arrays of either width. */
enum windrow_status windrow_linkrun_put_narrow(struct windrow_linkrun_writer *run, uint64_t target, const uint32_t *sources, size_t count);
enum windrow_status windrow_linkrun_put(struct windrow_linkrun_writer *run, uint64_t target, const uint64_t *sources, size_t count, bool more);
/* Ends the frame here, so that reading can begin at windrow_frames_offset(&run->frames). */
enum windrow_status windrow_linkrun_cut(struct windrow_linkrun_writer *run);
enum windrow_status windrow_linkrun_writer_finish(struct windrow_linkrun_writer *run);
void windrow_linkrun_writer_abandon(struct windrow_linkrun_writer *run);

struct windrow_linkrun_reader {
    struct windrow_frames_reader frames;
    const uint8_t *at;
    uint64_t last_first;
    uint64_t end_offset;   /* reading stops at the frame that begins here */
    /* the current entry */
    bool ended;
    bool more;
    uint64_t target;
    size_t count;
    size_t used;           /* for the caller: how many of the sources it has taken */
    uint64_t *sources;     /* WINDROW_LINKRUN_SOURCES of them */
};

enum windrow_status windrow_linkrun_reader_open(struct windrow_linkrun_reader *run, const char *path);
/* Reads frames from `offset` up to `end_offset` (UINT64_MAX: to the end of the file). */
void windrow_linkrun_seek(struct windrow_linkrun_reader *run, uint64_t offset, uint64_t end_offset);
enum windrow_status windrow_linkrun_next(struct windrow_linkrun_reader *run);
void windrow_linkrun_reader_close(struct windrow_linkrun_reader *run);

#endif
