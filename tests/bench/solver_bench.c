/* solver_bench: how many links a solver visits until an error is certified, as a share of plain power iteration.
 *
 *     solver_bench ERROR BETA[,BETA…] STORE…
 *
 * For each store and damping: plain power iteration over all links, the solver as `windrow rank` uses it,
 * and with each of its devices switched off. Visits count certifying passes and passes inside hosts. The
 * geometric mean over the stores comes last when there are several.
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
    {"power iteration, all links", WINDROW_METHOD_POWER, false, false, false},
    {"as rank does", WINDROW_METHOD_MIXED, false, false, false},
    {"without host balance", WINDROW_METHOD_MIXED, true, false, false},
    {"without mixing", WINDROW_METHOD_MIXED, false, true, false},
    {"without inner passes", WINDROW_METHOD_MIXED, false, false, true},
    {"mixing alone", WINDROW_METHOD_MIXED, true, false, true},
    {"host balance alone", WINDROW_METHOD_MIXED, false, true, true},
    {"none: plain Gauss-Seidel", WINDROW_METHOD_MIXED, true, true, true},
};
enum { VARIANTS = sizeof variants / sizeof *variants };

struct outcome {
    bool proven;
    uint64_t sweeps, certifications, visits;
    unsigned guard;
    double error, seconds;
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
    double began = windrow_seconds();
    bench_expect(windrow_solver_create(&options, &solver), store->path);
    while (!outcome.proven && solver->state.sweeps < SWEEPS_MOST) {
        bench_expect(windrow_solver_sweep(solver), store->path);
        if (!(windrow_solver_expected_error(solver) <= error))
            continue;
        struct windrow_certificate certificate;
        bool complete;
        bench_expect(windrow_solver_certify(solver, error, 0, &certificate, &complete), store->path);
        outcome.error = certificate.error_l1;
        outcome.proven = complete && certificate.error_l1 <= error;
    }
    outcome.seconds = windrow_seconds() - began;
    outcome.sweeps = solver->state.sweeps;
    outcome.certifications = solver->state.certifications;
    outcome.visits = solver->state.link_visits;
    outcome.guard = (unsigned)solver->state.guard;
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
    for (unsigned s = 0; s < store_count; s++) {
        struct bench_store store = bench_store_open(argv[3 + s]);
        printf("%s: %llu pages, %llu links, of them core %llu pages, %llu links\n", basename(argv[3 + s]), (unsigned long long)store.web.pages,
               (unsigned long long)(store.web.links[0] + store.web.links[1]), (unsigned long long)store.web.core_pages,
               (unsigned long long)store.web.links[WINDROW_BLOCK_CORE]);
        for (unsigned b = 0; b < beta_count; b++) {
            double power = 1;
            for (unsigned v = 0; v < VARIANTS; v++) {
                struct outcome outcome = solve(&store, crew, &variants[v], betas[b], error);
                if (v == 0)
                    power = (double)outcome.visits;
                double share = outcome.proven ? (double)outcome.visits / power : INFINITY;
                logs[b][v] += log(share);
                printf("  beta %.2f  %-28s %6llu sweeps + %llu certifying  share %6.3f  %8.2f s%s%s\n", betas[b], variants[v].name,
                       (unsigned long long)outcome.sweeps, (unsigned long long)outcome.certifications, share, outcome.seconds,
                       outcome.guard ? outcome.guard > 1 ? "  guard: all off" : "  guard: balance off" : "",
                       outcome.proven ? "" : "  NOT PROVEN");
                fflush(stdout);
            }
        }
        windrow_store_close(store.store);
    }
    if (store_count > 1)
        for (unsigned b = 0; b < beta_count; b++)
            for (unsigned v = 0; v < VARIANTS; v++)
                printf("geometric mean of %u  beta %.2f  %-28s share %6.3f\n", store_count, betas[b], variants[v].name,
                       exp(logs[b][v] / store_count));
    windrow_crew_destroy(crew);
    return 0;
}
