/* solver_bench: how many links a solver visits until an error is certified, as a share of plain power iteration.
 *
 *     solver_bench ERROR BETA[,BETA…] STORE…
 *
 * For each store and damping a line: passes of plain power iteration over all links; then, for the solver as
 * `windrow rank` uses it and with its devices switched off, the share of links visited (certifying passes and
 * passes inside hosts counted) and all passes over the core. A * tells that the guard switched
 * something off, a ! that nothing was proven. The geometric mean over the stores comes last when there are several.
 */
#include "bench.h"

#include "base/meter.h"
#include "rank/solver.h"

#include <libgen.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { SWEEPS_MOST = 20000, BETAS_MOST = 8 };

struct variant {
    const char *name;
    enum windrow_method method;
    bool without_balance, without_mixing, without_inner_passes;
};

static const struct variant variants[] = {
    {"power", WINDROW_METHOD_POWER, false, false, false},
    {"as rank does", WINDROW_METHOD_MIXED, false, false, false},
    {"no balance", WINDROW_METHOD_MIXED, true, false, false},
    {"no mixing", WINDROW_METHOD_MIXED, false, true, false},
    {"no inner", WINDROW_METHOD_MIXED, false, false, true},
    {"mixing only", WINDROW_METHOD_MIXED, true, false, true},
    {"balance only", WINDROW_METHOD_MIXED, false, true, true},
    {"none of them", WINDROW_METHOD_MIXED, true, true, true},
};
enum { VARIANTS = sizeof variants / sizeof *variants };

struct outcome {
    bool proven;
    uint64_t passes, visits;
    bool guarded;
};

/* Sweeps and certifies by the same rule as `windrow rank`. */
static struct outcome solve(const struct bench_store *store, struct windrow_crew *crew, const struct variant *variant, double beta, double error)
{
    const struct windrow_solver_options options = {
        .web = &store->web, .crew = crew, .method = variant->method, .beta = beta,
        .without_balance = variant->without_balance, .without_mixing = variant->without_mixing,
        .without_inner_passes = variant->without_inner_passes,
    };
    struct windrow_solver *solver;
    struct outcome outcome = {0};
    bench_expect(windrow_solver_create(&options, &solver), store->path);
    while (!outcome.proven && solver->state.sweeps < SWEEPS_MOST) {
        bench_expect(windrow_solver_sweep(solver), store->path);
        if (!(windrow_solver_expected_error(solver) <= error))
            continue;
        struct windrow_certificate certificate;
        bool complete;
        bench_expect(windrow_solver_certify(solver, error, 0, &certificate, &complete), store->path);
        outcome.proven = complete && certificate.error_l1 <= error;
    }
    outcome.passes = solver->state.sweeps + solver->state.certifications;
    outcome.visits = solver->state.link_visits;
    outcome.guarded = solver->state.guard != WINDROW_GUARD_OPEN;
    windrow_solver_destroy(solver);
    return outcome;
}

static unsigned read_betas(char *text, double betas[BETAS_MOST])
{
    unsigned count = 0;
    char *end;
    for (; count < BETAS_MOST && *text; text = *end == ',' ? end + 1 : end) {
        betas[count] = strtod(text, &end);
        if (end == text || !(betas[count] > 0 && betas[count] < 1) || (*end && *end != ','))
            bench_usage("BETA lies between 0 and 1");
        count++;
    }
    return count;
}

int main(int argc, char **argv)
{
    if (argc < 4)
        bench_usage("solver_bench ERROR BETA[,BETA...] STORE...");
    double error = strtod(argv[1], NULL), betas[BETAS_MOST];
    unsigned beta_count = read_betas(argv[2], betas), store_count = (unsigned)argc - 3;
    static double logs[BETAS_MOST][VARIANTS];
    struct windrow_crew *crew;
    bench_expect(windrow_crew_create(windrow_crew_default_workers(), &crew), "threads");
    printf("%-26s %4s %5s", "", "beta", variants[0].name);
    for (unsigned v = 1; v < VARIANTS; v++)
        printf("  %13s", variants[v].name);
    putchar('\n');
    for (unsigned s = 0; s < store_count; s++) {
        struct bench_store store = bench_store_open(argv[3 + s]);
        for (unsigned b = 0; b < beta_count; b++) {
            struct outcome power = solve(&store, crew, &variants[0], betas[b], error);
            printf("%-26s %.2f %5llu", basename(argv[3 + s]), betas[b], (unsigned long long)power.passes);
            for (unsigned v = 1; v < VARIANTS; v++) {
                struct outcome outcome = solve(&store, crew, &variants[v], betas[b], error);
                double share = (double)outcome.visits / (double)power.visits;
                logs[b][v] += outcome.proven && power.proven ? log(share) : INFINITY;
                printf("  %.3f %4llu%s%s%*s", share, (unsigned long long)outcome.passes, outcome.guarded ? "*" : "", outcome.proven ? "" : "!",
                       3 - outcome.guarded - !outcome.proven, "");
                fflush(stdout);
            }
            putchar('\n');
        }
        windrow_store_close(store.store);
    }
    for (unsigned b = 0; store_count > 1 && b < beta_count; b++) {
        printf("geometric mean of %-8u %.2f      ", store_count, betas[b]);
        for (unsigned v = 1; v < VARIANTS; v++)
            printf("  %.3f        ", exp(logs[b][v] / store_count));
        putchar('\n');
    }
    windrow_crew_destroy(crew);
    return 0;
}
