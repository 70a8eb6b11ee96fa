/* table: rows for programs and people, as TAB-separated values, CSV (RFC 4180) or JSON lines.
 *
 * Goes to standard output or into a file, which is written aside and renamed when it is whole, so that
 * a reader never sees half an answer; a name that ends in .gz or .zst is compressed. Text cells hold URLs
 * and host names, which are printable ASCII; should a byte be anything else, it is written as %NN.
 */
#ifndef TOOLS_TABLE_H
#define TOOLS_TABLE_H

#include "windrow.h"

enum table_format { TABLE_TSV, TABLE_CSV, TABLE_JSONL };

/* False when there is no such format. */
bool table_format_named(const char *name, enum table_format *format);

struct table;

/* `columns`, `column_count` of them, name the cells of each row; they and `out` (NULL or "-": standard
 * output) must outlive the table. Prints an error message of its own and returns WINDROW_RESOURCE when
 * the file cannot be made. */
enum windrow_status table_open(const char *command, const char *out, enum table_format format, const char *const *columns,
                               size_t column_count, struct table **table);

/* Cells of the row, in the order of the columns. After the last one the row is ended. Failures are kept. */
void table_text(struct table *table, const char *text, size_t text_bytes);
void table_count(struct table *table, uint64_t count);
void table_range(struct table *table, uint64_t first, uint64_t last); /* "3", or "3-5" */
void table_number(struct table *table, double number, int digits);   /* significant digits */

/* What has become of the rows so far: WINDROW_RESOURCE once one could not be written. */
enum windrow_status table_state(const struct table *table);
/* Sends what is still held back, for a reader that waits. */
void table_flush(struct table *table);

/* Ends the table. With `keep` the file is put in its place, otherwise what was written of it is removed;
 * returns and says whether all of it could be written. */
enum windrow_status table_close(struct table *table, bool keep);

#endif
