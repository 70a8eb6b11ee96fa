/* command: what all commands of the program share: messages, and values on the command line.
 *
 * Results go to standard output, talk to standard error, as "windrow COMMAND: message". Whatever came
 * from files or the command line is escaped on the way: a crawl must not be able to write control
 * characters to somebody's terminal.
 */
#ifndef TOOLS_COMMAND_H
#define TOOLS_COMMAND_H

#include "windrow.h"

#include <argp.h>
#include <stdio.h>

/* The commands: each parses its own arguments, with argv[0] as "windrow COMMAND". */
enum windrow_status plan_command(int argc, char **argv);
enum windrow_status shard_command(int argc, char **argv);
enum windrow_status rank_command(int argc, char **argv);
enum windrow_status status_command(int argc, char **argv);
enum windrow_status top_command(int argc, char **argv);
enum windrow_status score_command(int argc, char **argv);
enum windrow_status verify_command(int argc, char **argv);

/* Keys of options that have no short form. */
enum { OPTION_FIRST = 256 };

/* For talk(): set once the arguments are known. */
extern bool command_quiet;

/* Says something on standard error, unless told to be quiet. */
void talk(const char *command, const char *format, ...) __attribute__((format(printf, 2, 3)));
/* Says what went wrong, quiet or not. */
void complain(const char *command, const char *format, ...) __attribute__((format(printf, 2, 3)));
/* Complains with the library's message when the status is a failure; returns the status. */
enum windrow_status finish(const char *command, enum windrow_status status);

/* Writes text with control characters and bytes that are no UTF-8 as \xNN. */
void put_escaped(FILE *file, const char *text, size_t text_bytes);

/* Values of options; a wrong one ends the program with exit code 2, naming the option. */
uint64_t size_value(const char *text, const char *option, struct argp_state *state);     /* 256M, 1.5G */
double seconds_value(const char *text, const char *option, struct argp_state *state);    /* 5m, 0.05s, 50ms, 30 */
uint64_t count_value(const char *text, const char *option, uint64_t most, struct argp_state *state);
double number_value(const char *text, const char *option, struct argp_state *state);
/* argp_error() with the text escaped. */
void usage_error(struct argp_state *state, const char *format, ...) __attribute__((format(printf, 2, 3)));

/* 12345678 as "12,345,678"; in one of a few buffers that take turns. */
const char *grouped(uint64_t number);
/* Digits with two decimals, rounded down, since no more is proven; in the same buffers. */
const char *proven_digits(double digits);

#endif
