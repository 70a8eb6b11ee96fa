#include "shard/remap.h"

#include "shard/linkrun.h"
#include "shard/part.h"
#include "shard/sealed.h"
#include "store/layout.h"

#include <stdlib.h>
#include <string.h>

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory for the maps of a batch; try a smaller --memory");
}

static enum windrow_status rewrite(struct windrow_linkrun_reader *in, struct windrow_linkrun_writer *out, const uint64_t *pages, const uint64_t *cores,
                                   uint64_t local_pages, struct windrow_buffer *marks)
{
    struct windrow_remap_mark mark = {.segment = UINT64_MAX};
    enum windrow_status status;
    for (;;) {
        if ((status = windrow_linkrun_next(in)))
            return status;
        if (in->ended)
            break;
        if (in->target >= local_pages)
            return windrow_frames_damaged(&in->frames);
        for (size_t index = 0; index < in->count; index++) {
            if (in->sources[index] >= local_pages || cores[in->sources[index]] == UINT64_MAX)
                return windrow_frames_damaged(&in->frames);
            in->sources[index] = cores[in->sources[index]];
        }
        uint64_t page = pages[in->target];
        if (page / WINDROW_SEGMENT_PAGES != mark.segment) {
            if ((status = windrow_linkrun_cut(out)))
                return status;
            mark = (struct windrow_remap_mark){page / WINDROW_SEGMENT_PAGES, windrow_frames_offset(&out->frames)};
            if ((status = windrow_buffer_append(marks, &mark, sizeof mark)))
                return status;
        }
        if ((status = windrow_linkrun_put(out, page, in->sources, in->count, in->more)))
            return status;
    }
    if ((status = windrow_linkrun_cut(out)))
        return status;
    mark = (struct windrow_remap_mark){UINT64_MAX, windrow_frames_offset(&out->frames)};
    return windrow_buffer_append(marks, &mark, sizeof mark);
}

enum windrow_status windrow_remap_run(const struct windrow_remap_parts *parts, uint64_t run, uint64_t local_pages)
{
    enum windrow_status status = WINDROW_OK;
    struct windrow_linkrun_reader in = {.frames.descriptor = -1};
    struct windrow_linkrun_writer out = {.frames.writer.descriptor = -1};
    struct windrow_buffer marks = {0};
    char *in_path = windrow_path(parts->scratch, "batch-%06llu.links", (unsigned long long)run);
    char *out_path = windrow_path(parts->scratch, "batch-%06llu.sorted", (unsigned long long)run);
    char *index_path = windrow_path(parts->scratch, "batch-%06llu.sorted.index", (unsigned long long)run);
    uint64_t *pages = malloc((local_pages + 1) * sizeof *pages), *cores = malloc((local_pages + 1) * sizeof *cores);
    if (!in_path || !out_path || !index_path || !pages || !cores) {
        status = memory();
        goto out;
    }
    if ((status = windrow_part_map_load(parts->scratch, parts->part_count, parts->page_bases, parts->core_bases, run, local_pages, pages, cores)) ||
        (status = windrow_linkrun_reader_open(&in, in_path)) || (status = windrow_linkrun_writer_open(&out, out_path)) ||
        (status = rewrite(&in, &out, pages, cores, local_pages, &marks)) || (status = windrow_linkrun_writer_finish(&out)))
        goto out;
    status = windrow_sealed_replace(index_path, marks.data, marks.bytes);
out:
    windrow_linkrun_reader_close(&in);
    windrow_linkrun_writer_abandon(&out);
    windrow_buffer_free(&marks);
    free(pages);
    free(cores);
    free(in_path);
    free(out_path);
    free(index_path);
    return status;
}

enum windrow_status windrow_remap_segment(const char *scratch, uint64_t run, uint64_t segment, uint64_t *begin, uint64_t *end)
{
    *begin = *end = 0;
    char *path = windrow_path(scratch, "batch-%06llu.sorted.index", (unsigned long long)run);
    if (!path)
        return memory();
    struct windrow_buffer marks = {0};
    enum windrow_status status = windrow_sealed_load(path, &marks);
    size_t count = marks.bytes / sizeof(struct windrow_remap_mark);
    const struct windrow_remap_mark *mark = (const struct windrow_remap_mark *)marks.data;
    for (size_t index = 0; !status && index + 1 < count; index++)
        if (mark[index].segment == segment) {
            *begin = mark[index].offset;
            *end = mark[index + 1].offset;
        }
    windrow_buffer_free(&marks);
    free(path);
    return status;
}
