/* kernel: the sums over one block's in-links, the innermost loops of every ranking.
 *
 * A value is what a core page passes along each of its links (score / out-degree). For each target the
 * kernel adds the values of its sources. The order of these additions is fixed, so that the bytes of a
 * result do not depend on the machine: far sources first, then near ones, then runs, each in chunks of
 * 1,024 links in four lanes, lane i taking links i, i+4, …; a chunk is ((lane 0 + lane 1) + (lane 2 +
 * lane 3)), and chunks are added with Neumaier's compensation. So the relative rounding error of a sum of
 * n values is at most windrow_kernel_roundings(n) times 2^-53.
 *
 * Use: windrow_kernel_load() a block, windrow_kernel_gather() its far sources, then either
 * windrow_kernel_relax() (Gauss-Seidel, in place) or windrow_kernel_sums() (nothing changes meanwhile).
 *
 * Blocks are not trusted: WINDROW_DAMAGED when counts or ids are out of range, before anything is read there.
 * Threads: a kernel is the scratch memory of one thread; the values must not change while it works.
 */
#ifndef WINDROW_SWEEP_KERNEL_H
#define WINDROW_SWEEP_KERNEL_H

#include "store/block.h"

enum { WINDROW_CHUNK_LINKS = 1024 };

struct windrow_numbers {
    union {
        uint32_t *narrow;
        uint64_t *wide;
    };
    uint32_t count;
};

/* A host that reaches out of a block: its core pages, and the block's targets that belong to it. */
struct windrow_own {
    uint64_t first, end;              /* core numbers; empty when there is none */
    uint32_t target_first, target_end;
    double sum;                       /* out: of the values of far sources inside the host, over these targets */
};

struct windrow_kernel {
    struct windrow_block block;
    const struct windrow_block_record *record;
    struct windrow_numbers far_counts, near_counts, run_counts, far_gaps, near_gaps, runs;
    struct windrow_buffer numbers;
    struct windrow_buffer far_memory;
    double *far; /* out of windrow_kernel_gather(): one sum a target */
};

void windrow_kernel_free(struct windrow_kernel *kernel); /* all zero is an empty kernel */

/* Decodes a block's numbers. `block` and what it points into may be reused afterwards; `record` must stay. */
enum windrow_status windrow_kernel_load(struct windrow_kernel *kernel, const struct windrow_block *block,
                                        const struct windrow_block_record *record);

/* Sums each target's far sources into kernel->far. `own`: two hosts that reach out of the block, or NULL. */
enum windrow_status windrow_kernel_gather(struct windrow_kernel *kernel, const double *values, uint64_t core_pages,
                                          struct windrow_own own[2]);

/* What a Gauss-Seidel update needs of the block's targets, arrays by target. */
struct windrow_relaxation {
    double beta;
    double jump;              /* (1 - beta) x the jump vector's entry, where it is the same for all */
    const double *jumps;      /* or the jump vector's entries themselves; NULL: use `jump` */
    const uint32_t *degrees;
};

/* Where the reading of near lists and runs stands: a target's lists can be found only after those before it.
 * A copy lets some targets be updated again. */
struct windrow_near_cursor {
    const double *values;         /* begin with the value of core page `origin` */
    uint64_t count;               /* of values */
    uint64_t near, run;           /* next of the near gaps; next of the runs' numbers */
    uint64_t near_first, run_first;
    uint64_t run_links;           /* links in the runs so far */
    bool wrong;
};

/* At the block's first target; `values` has one entry for each target. */
struct windrow_near_cursor windrow_kernel_near_begin(const struct windrow_kernel *kernel, const double *values);

/* Gauss-Seidel over the targets from `first` to before `end`, where the cursor stands: near sources and runs
 * read `values` (by target, at first those from before the wave), which each update changes at once. For
 * core blocks that are no pieces. `change` is set to the sum of |change| x degree. */
enum windrow_status windrow_kernel_relax(struct windrow_kernel *kernel, const struct windrow_relaxation *relaxation,
                                         struct windrow_near_cursor *cursor, uint32_t first, uint32_t end, double *values, double *change);

/* All sources of each target summed, from values that stay: `sums` has one entry a target. */
enum windrow_status windrow_kernel_sums(struct windrow_kernel *kernel, const double *values, uint64_t core_pages, double *sums);

/* For a piece: the values of sources inside [first, end) among its runs. After windrow_kernel_sums(). */
double windrow_kernel_runs_inside(const struct windrow_kernel *kernel, const double *values, uint64_t first, uint64_t end);

/* In-links of target t, from the loaded block. Runs are counted in full. Walks `*run`, which begins at 0
 * for target 0 and must be handed on from target to target. */
uint64_t windrow_kernel_links(const struct windrow_kernel *kernel, uint32_t target, uint32_t *run);

/* Most roundings that a value goes through in a sum of `links` values. */
double windrow_kernel_roundings(uint64_t links);

#endif
