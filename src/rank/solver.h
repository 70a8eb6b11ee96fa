/* solver: the scores of the core by sweeps over its blocks, and the proof of what they are worth.
 *
 * Unknowns are y in (I - beta P^T) y = (1-beta) v, scores x = y / sum(y): dangling pages, which then jump by
 * v, hand nothing around while sweeping. The vector kept is y/degree, what a page passes along each link.
 *
 * A sweep updates every core page once, in Gauss-Seidel fashion: the blocks of a wave read the values from
 * before the wave, and their own updates for near sources. After a host's pages are updated, they are
 * scaled by the one factor that makes the host's own mass equation hold: what flows in = what stays + what
 * leaves (aggregation and disaggregation: Takahashi 1975; Koury, McAllister & Stewart 1984). Sweeps are
 * accelerated by Anderson mixing (mixing.h). Neither is safe: on some small webs balance circles for ever.
 * So there is a guard: when the change grows twice in a row, mixing begins anew; when twenty sweeps bring
 * less than twenty of plain power iteration would, balance goes off for the rest of the run, and if that
 * happens again, mixing too. Plain Gauss-Seidel is a regular splitting of an M-matrix and always converges.
 *
 * Where a host changes much beside the average link, its near links get more passes inside a sweep.
 *
 * With tiles (sweep/tiles.h) the vectors lie in a mapped file, and no more of them than a stripe's is in memory at a
 * time. A sweep takes one stripe of targets after another: first it adds up what flows in from the other stripes, whose
 * values are looked at in turn and let go of, then it sweeps the stripe's own links as above. Hosts that reach across
 * a border of stripes are not balanced.
 *
 * The method `power` is plain power iteration over all links, the tests' witness.
 *
 * Everything is deterministic: the same web gives the same bytes for any crew, and a sweep that was stopped
 * between two waves and gone on with from its saved state as well.
 *
 * Threads: one caller at a time; the crew works inside.
 */
#ifndef WINDROW_RANK_SOLVER_H
#define WINDROW_RANK_SOLVER_H

#include "base/meter.h"
#include "rank/certificate.h"
#include "rank/mixing.h"
#include "sweep/stream.h"
#include "sweep/tiles.h"

enum { WINDROW_SOLVER_MEMORY_SWEEPS = 20 };

/* What the guard has switched off. */
enum windrow_guard { WINDROW_GUARD_OPEN, WINDROW_GUARD_NO_BALANCE, WINDROW_GUARD_NO_MIXING };

struct windrow_solver_options {
    const struct windrow_web *web;
    struct windrow_crew *crew;
    enum windrow_method method;
    double beta;
    const double *core_jump;    /* jump vector of the core by core number, and of the rim by rim number; */
    const double *rim_jump;     /* NULL: uniform. Together they sum to 1 and are not negative */
    bool without_balance;       /* for measuring what each costs and brings */
    bool without_mixing;
    bool without_inner_passes;
    const struct windrow_tiles *tiles;  /* of the web; NULL: vectors in memory. Not for the method `power` */
    int scratch;                /* with tiles: descriptor of an empty file for the vectors, which the caller closes afterwards */
    struct windrow_meter *meter;  /* counts links; may be NULL */
    /* Called between two waves, when the state may be saved; anything but WINDROW_OK ends the sweep there,
     * to be gone on with by calling windrow_solver_sweep() again. May be NULL. */
    enum windrow_status (*pause)(void *context);
    void *pause_context;
};

/* What a sweep carries over from wave to wave about a host or a list that reaches beyond its block. */
struct windrow_solver_carry {
    double host_inflow, host_kept;
    double piece_sum, piece_error, piece_own;
    uint64_t piece_open;
};

/* Everything but the vectors: what a checkpoint holds besides them. */
struct windrow_solver_state {
    uint64_t sweeps;          /* finished ones, without certifying passes */
    uint64_t certifications;  /* certifying passes over the core */
    uint64_t next_block;      /* of the sweep going on; 0: it has not begun */
    uint64_t link_visits;     /* all passes, certifying ones included */
    uint64_t guard;           /* enum windrow_guard */
    uint64_t change_count;    /* changes known, newest last, at most the array's length */
    double changes[WINDROW_SOLVER_MEMORY_SWEEPS + 1]; /* sum of |change of y| of the last sweeps */
    double fall;              /* of the norm, as the last mixing foresaw */
    double change_relative;   /* largest |change| / value of the last sweep */
    double caution_error;     /* how many times more the last certificate found than was expected */
    double caution_rho;
    double dangling;          /* power: the mass of the dangling pages */
    struct windrow_solver_carry carry;
    struct windrow_mixing_state mixing;
};

struct windrow_solver {
    struct windrow_solver_options options;
    struct windrow_solver_state state;
    double *values;               /* y/degree of each core page */
    double *rim;                  /* y of each dangling page; filled by windrow_solver_certify() */
    double scale;                 /* sum of y; filled by windrow_solver_certify() */
    struct windrow_mixing mixing; /* with the vectors of the last change and of the columns */
    uint8_t *host_passes;         /* passes that each host gets on top; for what a block begins with, block_passes */
    uint8_t *block_passes;
    struct windrow_solver_private *own;
};

/* Bytes that a solver's vectors take in memory. */
uint64_t windrow_solver_memory_bytes(const struct windrow_web *web);
/* Bytes that are in memory at a time with tiles of these stripes, degrees included. */
uint64_t windrow_solver_stripe_bytes(const struct windrow_web *web, const struct windrow_stripes *stripes);

/* With tiles: lets go of a part of a vector, which comes back from its file when it is looked at again. Else nothing. */
void windrow_solver_release(const struct windrow_solver *solver, const void *memory, uint64_t bytes);
/* The same for all vectors and degrees. */
void windrow_solver_release_all(const struct windrow_solver *solver);

/* A solver at its starting vector. The web must have passed windrow_web_check(). Options are copied, what
 * they point to must outlive the solver. */
enum windrow_status windrow_solver_create(const struct windrow_solver_options *options, struct windrow_solver **solver);
void windrow_solver_destroy(struct windrow_solver *solver); /* NULL is fine */

/* One sweep, or the rest of the one that was stopped. */
enum windrow_status windrow_solver_sweep(struct windrow_solver *solver);

/* The error_l1 that certifying would probably find now, and the rho; negative: no idea yet. */
double windrow_solver_expected_error(const struct windrow_solver *solver);
double windrow_solver_expected_rho(const struct windrow_solver *solver);

/* Proves the error by a pass over the core in which nothing changes, and gives the dangling pages their scores
 * by a pass over the rim. The proof is for windrow_solver_core_score() and ..._rim_score(). Where the core
 * shows that `wanted_error` or `wanted_rho` (0: anything will do) cannot be proven, *complete is false:
 * the rim was left out, there are no scores, and the certificate only tells how far it is off. */
enum windrow_status windrow_solver_certify(struct windrow_solver *solver, double wanted_error, double wanted_rho,
                                           struct windrow_certificate *certificate, bool *complete);

/* Scores as they are handed out, after windrow_solver_certify() and before the next sweep. */
static inline double windrow_solver_core_score(const struct windrow_solver *solver, uint64_t core)
{
    return solver->values[core] * solver->options.web->degrees[core] / solver->scale;
}

static inline double windrow_solver_rim_score(const struct windrow_solver *solver, uint64_t rim)
{
    return solver->rim[rim] / solver->scale;
}

/* Vectors that a checkpoint saves, in order: pointers and their bytes. Returns how many there are. */
enum { WINDROW_SOLVER_VECTORS_MOST = 5 + 2 * WINDROW_MIXING_COLUMNS };
struct windrow_solver_vector { void *data; uint64_t bytes; };
unsigned windrow_solver_vectors(struct windrow_solver *solver, struct windrow_solver_vector vectors[WINDROW_SOLVER_VECTORS_MOST]);

#endif
