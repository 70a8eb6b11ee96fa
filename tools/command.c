#include "command.h"

#include <errno.h>
#include <math.h>
#include <stdarg.h>
#include <stdlib.h>
#include <string.h>

bool command_quiet;

/* The bytes of a well-formed UTF-8 character that is not a control character; 0 when there is none. */
static size_t printable_bytes(const unsigned char *text, size_t text_bytes)
{
    if (!text_bytes)
        return 0;
    if (text[0] < 0x80)
        return text[0] >= 0x20 && text[0] != 0x7F;
    size_t bytes = text[0] >= 0xC2 && text[0] <= 0xDF ? 2 : (text[0] & 0xF0) == 0xE0 ? 3 : text[0] >= 0xF0 && text[0] <= 0xF4 ? 4 : 0;
    if (!bytes || bytes > text_bytes)
        return 0;
    for (size_t i = 1; i < bytes; i++)
        if ((text[i] & 0xC0) != 0x80)
            return 0;
    if (text[0] == 0xC2 && text[1] < 0xA0) /* control characters of ISO 6429's upper set */
        return 0;
    if ((text[0] == 0xE0 && text[1] < 0xA0) || (text[0] == 0xED && text[1] > 0x9F) || (text[0] == 0xF0 && text[1] < 0x90) ||
        (text[0] == 0xF4 && text[1] > 0x8F))
        return 0;
    if (text[0] == 0xE2 && ((text[1] == 0x80 && text[2] >= 0xAA && text[2] <= 0xAE) || (text[1] == 0x81 && text[2] >= 0xA6 && text[2] <= 0xA9)))
        return 0; /* characters that turn the direction of the text around them */
    return bytes;
}

void put_escaped(FILE *file, const char *text, size_t text_bytes)
{
    const unsigned char *bytes = (const unsigned char *)text;
    for (size_t at = 0; at < text_bytes;) {
        size_t printable = printable_bytes(bytes + at, text_bytes - at);
        if (printable)
            fwrite(bytes + at, 1, printable, file);
        else
            fprintf(file, "\\x%02X", bytes[at]);
        at += printable ? printable : 1;
    }
}

static void say(const char *command, const char *format, va_list arguments)
{
    char *text = NULL;
    int bytes = vasprintf(&text, format, arguments);
    if (bytes < 0)
        return;
    /* One message, one write: lines of several processes do not mix. */
    char *line = NULL;
    size_t line_bytes = 0;
    FILE *memory = open_memstream(&line, &line_bytes);
    if (memory) {
        fprintf(memory, "windrow %s: ", command);
        put_escaped(memory, text, (size_t)bytes);
        fputc('\n', memory);
        fclose(memory);
        fflush(stdout);
        fwrite(line, 1, line_bytes, stderr);
    }
    free(line);
    free(text);
}

void talk(const char *command, const char *format, ...)
{
    if (command_quiet)
        return;
    va_list arguments;
    va_start(arguments, format);
    say(command, format, arguments);
    va_end(arguments);
}

void complain(const char *command, const char *format, ...)
{
    va_list arguments;
    va_start(arguments, format);
    say(command, format, arguments);
    va_end(arguments);
}

enum windrow_status finish(const char *command, enum windrow_status status)
{
    if (status)
        complain(command, "%s", windrow_message());
    return status;
}

void usage_error(struct argp_state *state, const char *format, ...)
{
    char *text = NULL, *line = NULL;
    size_t line_bytes = 0;
    va_list arguments;
    va_start(arguments, format);
    int bytes = vasprintf(&text, format, arguments);
    va_end(arguments);
    FILE *memory = open_memstream(&line, &line_bytes);
    if (memory) {
        put_escaped(memory, text, bytes < 0 ? 0 : (size_t)bytes);
        fclose(memory);
    }
    argp_error(state, "%s", line ? line : "");
    free(line);
    free(text);
}

/* The number at the start of the text and what follows it. False when there is none, or a negative one. */
static bool leading_number(const char *text, double *number, const char **rest)
{
    if (*text != '.' && (*text < '0' || *text > '9')) /* no white space, sign, infinity */
        return false;
    char *end;
    errno = 0;
    *number = strtod(text, &end);
    *rest = end;
    return end != text && isfinite(*number) && !strpbrk(text, "xXpP");
}

uint64_t size_value(const char *text, const char *option, struct argp_state *state)
{
    static const char units[] = "KMGT";
    double number;
    const char *rest;
    if (leading_number(text, &number, &rest)) {
        const char *unit = *rest ? strchr(units, *rest >= 'a' && *rest <= 'z' ? *rest - 32 : *rest) : NULL;
        if (unit && *unit) {
            number = ldexp(number, 10 * (int)(unit - units + 1));
            rest++;
        }
        if (!*rest && number >= 1 && number < 0x1p63)
            return (uint64_t)number;
    }
    usage_error(state, "--%s=%s: not a size; write it like 800M or 4G (K, M, G, T: powers of 1024)", option, text);
    return 0;
}

double seconds_value(const char *text, const char *option, struct argp_state *state)
{
    double number;
    const char *rest;
    if (leading_number(text, &number, &rest)) {
        double unit = !*rest || !strcmp(rest, "s") ? 1 : !strcmp(rest, "ms") ? 1e-3 : !strcmp(rest, "m") ? 60 : !strcmp(rest, "h") ? 3600 : 0;
        if (unit > 0)
            return number * unit;
    }
    usage_error(state, "--%s=%s: not a time; write it like 30s, 5m, 1h or 500ms", option, text);
    return 0;
}

uint64_t count_value(const char *text, const char *option, uint64_t most, struct argp_state *state)
{
    char *end;
    errno = 0;
    unsigned long long number = strtoull(text, &end, 10);
    if (*text < '0' || *text > '9' || *end || errno || !number || number > most)
        usage_error(state, "--%s=%s: not a whole number from 1 to %llu", option, text, (unsigned long long)most);
    return number;
}

double number_value(const char *text, const char *option, struct argp_state *state)
{
    double number = 0;
    const char *rest;
    if (!leading_number(text, &number, &rest) || *rest)
        usage_error(state, "--%s=%s: not a number", option, text);
    return number;
}

enum { TEXT_BUFFERS = 12, TEXT_BYTES = 32 };

/* Enough buffers for all the numbers of one message. */
static char *next_text(void)
{
    static char buffers[TEXT_BUFFERS][TEXT_BYTES];
    static unsigned turn;
    return buffers[turn++ % TEXT_BUFFERS];
}

const char *grouped(uint64_t number)
{
    char *to = next_text() + TEXT_BYTES;
    *--to = 0;
    for (unsigned digits = 0; number || !digits; digits++, number /= 10) {
        if (digits && digits % 3 == 0)
            *--to = ',';
        *--to = (char)('0' + number % 10);
    }
    return to;
}

const char *proven_digits(double digits)
{
    char *text = next_text();
    snprintf(text, TEXT_BYTES, "%.2f", floor(digits * 100) / 100);
    return text;
}
