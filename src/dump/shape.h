/* shape: how the lines of a dump are to be read.
 *
 *   pairs   source TAB target [TAB rel tokens]
 *   lists   source TAB target TAB target ...
 *   ids     numbers: source target [target ...], between TABs or other white space
 *
 * In every shape a line with a source alone says that the page was fetched and has no links.
 * Threads: every function touches nothing but its arguments.
 */
#ifndef WINDROW_DUMP_SHAPE_H
#define WINDROW_DUMP_SHAPE_H

#include <stdbool.h>
#include <stddef.h>

/* The values are those of the public enum windrow_shape. */
enum windrow_dump_shape {
    WINDROW_DUMP_AUTO, /* to be recognised, file by file */
    WINDROW_DUMP_PAIRS,
    WINDROW_DUMP_LISTS,
    WINDROW_DUMP_IDS
};

/* A sample for recognition is a file's first 1,000 lines, as far as they lie in its first 4 MiB. */
#define WINDROW_DUMP_SAMPLE_LINES 1000
#define WINDROW_DUMP_SAMPLE_BYTES ((size_t)4 << 20)

/* Recognises the shape of a file from its beginning.
 *
 * sample, bytes   the beginning of the file; lines after the 1,000th are not looked at
 * whole           the file ends with the sample, so that its last line is complete without a newline
 *
 * Blank lines do not count, nor do blank fields at the end of a line. Where all lines hold only
 * numbers, between TABs or other white space: ids.
 * Otherwise a third field made of rel tokens only speaks for pairs, a third field that is something else, and
 * a fourth field, for lists. The larger number of lines wins (a few damaged lines do not turn a
 * file's meaning over); with equal numbers above zero it is pairs, since no list holds rel tokens. Lines of one or
 * two fields say nothing, since they mean the same in both; where there are no others it is pairs.
 */
enum windrow_dump_shape windrow_dump_shape_recognise(const char *sample, size_t bytes, bool whole);

/* Reads a field of HTML link types, separated by white space or commas, in any case.
 *
 * Returns false when it holds anything else. *nofollow becomes true for nofollow, ugc and sponsored. A blank
 * field is fine and says nothing. Known besides these (HTML standard, link types allowed on `a`):
 * alternate, author, bookmark, external, help, license, me, next, noopener, noreferrer, opener, prev,
 * privacy-policy, search, tag, terms-of-service.
 */
bool windrow_dump_rel_read(const char *field, size_t bytes, bool *nofollow);

#endif
