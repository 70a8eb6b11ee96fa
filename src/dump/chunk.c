#include "dump/chunk.h"

#include <stdlib.h>
#include <string.h>

void windrow_dump_chunk_free(struct windrow_dump_chunk *chunk)
{
    free(chunk->text);
    *chunk = (struct windrow_dump_chunk){0};
}

static inline bool is_blank(char byte)
{
    return byte == ' ' || (byte >= '\t' && byte <= '\r');
}

static inline void trim_end(const char *start, const char **end)
{
    while (*end > start && is_blank((*end)[-1]))
        --*end;
}

/* Trims a field, unless it is too long to be one. */
static inline void trim_field(const char **start, const char **end)
{
    if ((size_t)(*end - *start) > WINDROW_DUMP_FIELD_BYTES_MAX)
        return;
    trim_end(*start, end);
    while (*start < *end && is_blank(**start))
        ++*start;
}

/* The end of the field that begins at `start`: a TAB, or among ids any white space; NULL when it is the line's last. */
static inline const char *field_end(enum windrow_dump_shape shape, const char *start, const char *end)
{
    if (shape != WINDROW_DUMP_IDS)
        return memchr(start, '\t', (size_t)(end - start));
    while (start < end && !is_blank(*start))
        start++;
    return start < end ? start : NULL;
}

void windrow_dump_lines_begin(struct windrow_dump_lines *lines, const struct windrow_dump_chunk *chunk)
{
    *lines = (struct windrow_dump_lines){
        .at = chunk->text,
        .end = chunk->text + chunk->bytes,
        .shape = chunk->shape,
        .line = chunk->first_line,
        .continued = chunk->continued,
    };
    /* Some editors put a byte order mark in front of UTF-8; it is repeated with the source of a long line. */
    if (chunk->first_line == 1 && chunk->bytes >= 3 && memcmp(chunk->text, "\xEF\xBB\xBF", 3) == 0)
        lines->at += 3;
}

/* Looks at the fields of a line of pairs behind its source; line->rest is its target afterwards. */
static void pair_read(struct windrow_dump_line *line)
{
    if (line->text_bytes > WINDROW_DUMP_PAIR_BYTES_MAX) {
        line->malformed = "the line is too long for a pair; if the file holds lists, use --shape lists";
        return;
    }
    if (line->rest == NULL)
        return;
    const char *end = line->rest_end;
    const char *target = line->rest;
    const char *tab = memchr(target, '\t', (size_t)(end - target));
    if (tab == NULL)
        return;
    line->rest_end = tab;
    trim_end(tab, &end);
    if (end == tab)
        return;
    const char *target_end = tab;
    trim_end(target, &target_end);
    if (target_end == target)
        line->malformed = "no target in front of the third field of a pair";
    else if (memchr(tab + 1, '\t', (size_t)(end - tab - 1)) != NULL)
        line->malformed = "more than three fields in a line of pairs; if the file holds lists, use --shape lists";
    else if (!windrow_dump_rel_read(tab + 1, (size_t)(end - tab - 1), &line->nofollow))
        line->malformed = "the third field of a pair is not made of rel tokens; if the file holds lists, use --shape lists";
}

bool windrow_dump_lines_next(struct windrow_dump_lines *lines, struct windrow_dump_line *line)
{
    while (lines->at < lines->end) {
        const char *start = lines->at;
        const char *newline = memchr(start, '\n', (size_t)(lines->end - start));
        const char *end = newline != NULL ? newline : lines->end;
        bool continued = lines->continued;
        lines->at = newline != NULL ? newline + 1 : lines->end;
        lines->line++;
        lines->continued = false;

        const char *last = end;
        trim_end(start, &last);
        if (last == start)
            continue;
        line->text = start;
        line->text_bytes = (size_t)(end - start);
        while (lines->shape == WINDROW_DUMP_IDS && is_blank(*start))
            start++;
        const char *tab = field_end(lines->shape, start, end);
        const char *source_end = tab != NULL ? tab : end;
        line->source = start;
        trim_field(&line->source, &source_end);
        line->source_bytes = (size_t)(source_end - line->source);
        line->number = lines->line - 1;
        line->continued = continued;
        line->malformed = NULL;
        line->rest = tab != NULL ? tab + 1 : NULL;
        line->rest_end = end;
        line->shape = lines->shape;
        line->nofollow = false;
        if (lines->shape == WINDROW_DUMP_PAIRS)
            pair_read(line);
        return true;
    }
    return false;
}

bool windrow_dump_line_target(struct windrow_dump_line *line, struct windrow_dump_target *target)
{
    while (line->rest != NULL) {
        const char *start = line->rest, *end = line->rest_end;
        bool pair = line->shape == WINDROW_DUMP_PAIRS;
        const char *tab = pair ? NULL : field_end(line->shape, start, end);
        line->rest = tab != NULL ? tab + 1 : NULL;
        if (tab != NULL)
            end = tab;
        trim_field(&start, &end);
        if (start == end)
            continue;
        target->text = start;
        target->bytes = (size_t)(end - start);
        target->nofollow = line->nofollow;
        return true;
    }
    return false;
}
