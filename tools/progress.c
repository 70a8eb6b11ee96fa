#include "progress.h"

#include "command.h"

#include <math.h>
#include <signal.h>
#include <stdlib.h>
#include <string.h>
#include <sys/ioctl.h>
#include <time.h>
#include <unistd.h>

static const double REDRAW_SECONDS = 0.1, LINE_SECONDS = 5, WORTH_KEEPING_SECONDS = 1;

static struct {
    const char *command;
    bool terminal;
    bool drawn;              /* the cursor stands behind a drawn line */
    double last_shown;
    struct sigaction interrupt_before, terminate_before;
} progress;

static atomic_bool stop_wished;

static double clock_seconds(void)
{
    struct timespec now;
    clock_gettime(CLOCK_MONOTONIC, &now);
    return (double)now.tv_sec + 1e-9 * (double)now.tv_nsec;
}

static void wish_to_stop(int signal_number)
{
    (void)signal_number;
    atomic_store(&stop_wished, true);
}

/* 12345678 as "12.3 M". */
static void write_amount(char *out, size_t out_bytes, double amount)
{
    static const char *const units[] = {"", " k", " M", " G", " T"};
    unsigned unit = 0;
    for (; amount >= 999.5 && unit < 4; unit++)
        amount /= 1000;
    snprintf(out, out_bytes, unit && amount < 99.95 ? "%.1f%s" : "%.0f%s", amount, units[unit]);
}

static void write_seconds(char *out, size_t out_bytes, double seconds)
{
    if (seconds < 60)
        snprintf(out, out_bytes, "%.0f s", seconds);
    else if (seconds < 3600)
        snprintf(out, out_bytes, "%d min %02d s", (int)seconds / 60, (int)seconds % 60);
    else if (seconds < 8.64e6)
        snprintf(out, out_bytes, "%d h %02d min", (int)(seconds / 3600), (int)(seconds / 60) % 60);
    else
        snprintf(out, out_bytes, "%.0f days", seconds / 86400);
}

static void write_line(char *line, size_t line_bytes, const struct windrow_progress *now)
{
    char done[32], total[32], rate[32], left[48];
    size_t used = 0;
    write_amount(done, sizeof done, (double)now->done);
    write_amount(total, sizeof total, (double)now->total);
    write_amount(rate, sizeof rate, now->rate);
    const char *unit = now->unit ? now->unit : "";
    const char *between = ": ";
#define ADD(...) \
    do { \
        int added = snprintf(line + used, line_bytes - used, __VA_ARGS__); \
        used += added < 0 ? 0 : (size_t)added < line_bytes - used ? (size_t)added : line_bytes - used - 1; \
    } while (0)
#define ADD_PART(format, ...) \
    do { \
        ADD("%s" format, between, __VA_ARGS__); \
        between = ", "; \
    } while (0)
    ADD("%s%s", atomic_load(&stop_wished) ? "stopping at the next checkpoint; " : "", now->stage ? now->stage : "");
    if (now->sweep)
        ADD(" %llu", (unsigned long long)now->sweep);
    if (now->share >= 0)
        ADD_PART("%.0f %%", floor(100 * (now->share < 1 ? now->share : 1)));
    if (now->seconds_left >= 0 && !now->stage_ended) {
        write_seconds(left, sizeof left, now->seconds_left);
        ADD_PART("%s left", left);
    }
    if (now->error_l1 >= 0)
        ADD_PART("error %.1e", now->error_l1);
    if (now->total)
        ADD_PART("%s of %s %s", done, total, unit);
    else
        ADD_PART("%s %s", done, unit);
    if (now->rate > 0)
        ADD_PART("%s/s", rate);
#undef ADD_PART
#undef ADD
}

static void clear_line(void)
{
    if (progress.drawn)
        fputs("\r\033[K", stderr);
    progress.drawn = false;
}

static void show(void *context, const struct windrow_progress *now)
{
    (void)context;
    char line[512];
    double time = clock_seconds();
    /* A stage worth remembering stays on the terminal; sweeps come by the dozen and do not. */
    bool keep = progress.terminal && now->stage_ended && !now->sweep && now->elapsed_seconds >= WORTH_KEEPING_SECONDS;
    if (!keep && time - progress.last_shown < (progress.terminal ? REDRAW_SECONDS : LINE_SECONDS))
        return;
    progress.last_shown = time;
    write_line(line, sizeof line, now);
    if (!progress.terminal) {
        talk(progress.command, "%s", line);
        return;
    }
    struct winsize size;
    size_t width = ioctl(STDERR_FILENO, TIOCGWINSZ, &size) || size.ws_col < 2 ? 80 : size.ws_col;
    if (strlen(line) > width - 1) /* the last column stays free: writing there makes some terminals wrap */
        line[width - 1] = 0;
    fprintf(stderr, "\r%s\033[K%s", line, keep ? "\n" : "");
    fflush(stderr);
    progress.drawn = !keep;
}

void progress_begin(const char *command, struct windrow_watch *watch)
{
    const char *kind = getenv("TERM");
    memset(&progress, 0, sizeof progress);
    progress.command = command;
    progress.terminal = isatty(STDERR_FILENO) && kind && strcmp(kind, "dumb");
    progress.last_shown = clock_seconds();
    atomic_store(&stop_wished, false);
    *watch = (struct windrow_watch){.listener = command_quiet ? NULL : show, .interval_seconds = progress.terminal ? 2 * REDRAW_SECONDS : 1,
                                    .stop = &stop_wished};
    struct sigaction action = {.sa_handler = wish_to_stop, .sa_flags = (int)(SA_RESETHAND | SA_RESTART)};
    sigemptyset(&action.sa_mask);
    sigaction(SIGINT, &action, &progress.interrupt_before);
    sigaction(SIGTERM, &action, &progress.terminate_before);
}

void progress_end(void)
{
    clear_line();
    fflush(stderr);
    sigaction(SIGINT, &progress.interrupt_before, NULL);
    sigaction(SIGTERM, &progress.terminate_before, NULL);
}
