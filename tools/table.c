#include "table.h"

#include "command.h"

#include <archive.h>
#include <archive_entry.h>
#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

enum { BUFFER_BYTES = 64 * 1024 };

struct table {
    const char *command;
    const char *out;          /* for messages */
    char *aside;              /* what is renamed to `out` at the end; NULL when written directly */
    int descriptor;
    struct archive *archive;  /* compresses; NULL: plain */
    enum table_format format;
    const char *const *columns;
    size_t column_count;
    size_t column;            /* of the next cell */
    enum windrow_status status;
    size_t used_bytes;
    char buffer[BUFFER_BYTES];
};

bool table_format_named(const char *name, enum table_format *format)
{
    static const char *const names[] = {"tsv", "csv", "jsonl"};
    for (size_t i = 0; i < sizeof names / sizeof names[0]; i++)
        if (!strcmp(name, names[i])) {
            *format = (enum table_format)i;
            return true;
        }
    return false;
}

static void fail_writing(struct table *table, const char *reason)
{
    if (!table->status)
        complain(table->command, "cannot write %s: %s", table->out, reason);
    table->status = WINDROW_RESOURCE;
}

static void send(struct table *table, const char *bytes, size_t count)
{
    while (count && !table->status) {
        ssize_t sent = table->archive ? archive_write_data(table->archive, bytes, count) : write(table->descriptor, bytes, count);
        if (sent < 0 && !table->archive && errno == EINTR)
            continue;
        if (sent <= 0) {
            fail_writing(table, table->archive ? archive_error_string(table->archive) : strerror(sent ? errno : ENOSPC));
            return;
        }
        bytes += sent;
        count -= (size_t)sent;
    }
}

void table_flush(struct table *table)
{
    send(table, table->buffer, table->used_bytes);
    table->used_bytes = 0;
}

static void put(struct table *table, const char *bytes, size_t count)
{
    while (count) {
        if (table->used_bytes == BUFFER_BYTES)
            table_flush(table);
        size_t room = BUFFER_BYTES - table->used_bytes, part = count < room ? count : room;
        memcpy(table->buffer + table->used_bytes, bytes, part);
        table->used_bytes += part;
        bytes += part;
        count -= part;
    }
}

static void put_text(struct table *table, const char *text)
{
    put(table, text, strlen(text));
}

/* URLs have commas but neither quotes nor backslashes; a quote is doubled or escaped all the same. */
static void put_cell(struct table *table, const char *text, size_t text_bytes)
{
    bool quoted = table->format == TABLE_JSONL || (table->format == TABLE_CSV && (memchr(text, ',', text_bytes) || memchr(text, '"', text_bytes)));
    size_t plain = 0; /* start of what can be copied as it is */
    if (quoted)
        put(table, "\"", 1);
    for (size_t i = 0; i < text_bytes; i++) {
        unsigned char byte = (unsigned char)text[i];
        char instead[4] = "";
        if (byte <= ' ' || byte >= 0x7F)
            snprintf(instead, sizeof instead, "%%%02X", byte);
        else if (byte == '"' && table->format != TABLE_TSV)
            strcpy(instead, table->format == TABLE_CSV ? "\"\"" : "\\\"");
        else if (byte == '\\' && table->format == TABLE_JSONL)
            strcpy(instead, "\\\\");
        if (!*instead)
            continue;
        put(table, text + plain, i - plain);
        put_text(table, instead);
        plain = i + 1;
    }
    put(table, text + plain, text_bytes - plain);
    if (quoted)
        put(table, "\"", 1);
}

static void begin_cell(struct table *table)
{
    if (table->format == TABLE_JSONL) {
        put(table, table->column ? ", " : "{", table->column ? 2 : 1);
        put_cell(table, table->columns[table->column], strlen(table->columns[table->column]));
        put(table, ": ", 2);
    } else if (table->column) {
        put(table, table->format == TABLE_CSV ? "," : "\t", 1);
    }
}

static void end_cell(struct table *table)
{
    if (++table->column < table->column_count)
        return;
    table->column = 0;
    put_text(table, table->format == TABLE_JSONL ? "}\n" : table->format == TABLE_CSV ? "\r\n" : "\n");
}

void table_text(struct table *table, const char *text, size_t text_bytes)
{
    begin_cell(table);
    put_cell(table, text, text_bytes);
    end_cell(table);
}

void table_count(struct table *table, uint64_t count)
{
    char text[32];
    snprintf(text, sizeof text, "%llu", (unsigned long long)count);
    begin_cell(table);
    put_text(table, text);
    end_cell(table);
}

void table_range(struct table *table, uint64_t first, uint64_t last)
{
    char text[64];
    if (first == last)
        snprintf(text, sizeof text, "%llu", (unsigned long long)first);
    else
        snprintf(text, sizeof text, "%llu-%llu", (unsigned long long)first, (unsigned long long)last);
    table_text(table, text, strlen(text));
}

void table_number(struct table *table, double number, int digits)
{
    char text[64];
    snprintf(text, sizeof text, "%.*g", digits, number);
    begin_cell(table);
    put_text(table, text);
    end_cell(table);
}

enum windrow_status table_state(const struct table *table)
{
    return table->status;
}

static bool ends_with(const char *text, const char *end)
{
    size_t text_bytes = strlen(text), end_bytes = strlen(end);
    return text_bytes > end_bytes && !strcmp(text + text_bytes - end_bytes, end);
}

static void start_compression(struct table *table)
{
    bool gzip = ends_with(table->out, ".gz"), zstd = ends_with(table->out, ".zst");
    if (!gzip && !zstd)
        return;
    struct archive_entry *entry = archive_entry_new();
    table->archive = archive_write_new();
    if (!entry || !table->archive) {
        fail_writing(table, "out of memory");
        archive_entry_free(entry);
        return;
    }
    archive_entry_set_filetype(entry, AE_IFREG);
    /* No time stamp: the same answer gives the same file. A filter that needs an outside program warns; we want none. */
    if (archive_write_set_format_raw(table->archive) != ARCHIVE_OK ||
        (gzip ? archive_write_add_filter_gzip(table->archive) : archive_write_add_filter_zstd(table->archive)) != ARCHIVE_OK ||
        (gzip && archive_write_set_filter_option(table->archive, "gzip", "timestamp", NULL) != ARCHIVE_OK) ||
        archive_write_set_bytes_in_last_block(table->archive, 1) != ARCHIVE_OK ||
        archive_write_open_fd(table->archive, table->descriptor) != ARCHIVE_OK ||
        archive_write_header(table->archive, entry) != ARCHIVE_OK)
        fail_writing(table, archive_error_string(table->archive));
    archive_entry_free(entry);
}

static void open_file(struct table *table, const char *out)
{
    struct stat facts;
    table->descriptor = -1;
    if (!stat(out, &facts) && !S_ISREG(facts.st_mode)) { /* a pipe or device: nothing there to put in its place */
        table->descriptor = open(out, O_WRONLY | O_CLOEXEC);
    } else {
        if (asprintf(&table->aside, "%s.%ld.new", out, (long)getpid()) < 0)
            table->aside = NULL;
        else
            table->descriptor = open(table->aside, O_WRONLY | O_CREAT | O_EXCL | O_CLOEXEC, 0666);
    }
    if (table->descriptor < 0) {
        fail_writing(table, strerror(errno));
        free(table->aside); /* not ours, if it is there */
        table->aside = NULL;
        return;
    }
    start_compression(table);
}

enum windrow_status table_open(const char *command, const char *out, enum table_format format, const char *const *columns,
                               size_t column_count, struct table **out_table)
{
    struct table *table = calloc(1, sizeof *table);
    *out_table = NULL;
    if (!table) {
        complain(command, "out of memory");
        return WINDROW_RESOURCE;
    }
    table->command = command;
    table->format = format;
    table->columns = columns;
    table->column_count = column_count;
    table->out = out && strcmp(out, "-") ? out : "standard output";
    table->descriptor = STDOUT_FILENO;
    if (out && strcmp(out, "-"))
        open_file(table, out);
    if (table->status) {
        enum windrow_status status = table->status;
        table_close(table, false);
        return status;
    }
    if (format != TABLE_JSONL)
        for (size_t i = 0; i < column_count; i++)
            table_text(table, columns[i], strlen(columns[i]));
    *out_table = table;
    return WINDROW_OK;
}

enum windrow_status table_close(struct table *table, bool keep)
{
    if (!table->aside) /* what a reader may have seen already cannot be taken back: let it have the rest */
        keep = true;
    if (keep)
        table_flush(table);
    if (table->archive) {
        if (archive_write_close(table->archive) != ARCHIVE_OK && keep)
            fail_writing(table, archive_error_string(table->archive));
        archive_write_free(table->archive);
    }
    if (table->aside && keep && fsync(table->descriptor))
        fail_writing(table, strerror(errno));
    if (table->descriptor >= 0 && close(table->descriptor) && keep)
        fail_writing(table, strerror(errno));
    if (table->aside && keep && !table->status && rename(table->aside, table->out))
        fail_writing(table, strerror(errno));
    if (table->aside && (!keep || table->status))
        unlink(table->aside);
    enum windrow_status status = table->status;
    free(table->aside);
    free(table);
    return status;
}
