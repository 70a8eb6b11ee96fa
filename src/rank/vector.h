/* vector: the files that a run keeps its numbers in. Each describes itself, so that a lost ledger can be rebuilt.
 *
 * Scores (scores-G.f64): header of 64 bytes, then a double for each page by id.
 *   0  16  "windrow scores 1"      32   8  store fingerprint
 *  16   8  pages                   40   8  XXH3-64 of the scores
 *  24   8  beta                    48   8  generation         56   8  XXH3-64 of the bytes before
 * Checkpoint (state-0, state-1): header of 64 bytes, the solver's state, its vectors one after another, and
 * the XXH3-64 of everything before.
 *   0  16  "windrow state 01"      40   8  store fingerprint
 *  16   8  core pages              48   8  bytes of the state
 *  24   8  sweeps                  56   8  generation
 *  32   8  next block
 *
 * Durability: what is written is synced, its name too, before these functions return.
 */
#ifndef WINDROW_RANK_VECTOR_H
#define WINDROW_RANK_VECTOR_H

#include "rank/solver.h"

enum { WINDROW_SCORES_OFFSET = 64 };

/* Writes the certified scores of a solver, page by page. `checksum` receives that of the scores. */
enum windrow_status windrow_scores_write(const char *directory, const char *path, const struct windrow_solver *solver,
                                         const struct windrow_store *store, uint64_t generation, uint64_t *checksum);

/* Maps scores after a look at their header. WINDROW_DAMAGED. */
enum windrow_status windrow_scores_open(const char *path, uint64_t pages, uint64_t generation, struct windrow_map *map, const double **scores);

/* Saves what a solver needs to go on. */
enum windrow_status windrow_state_write(const char *directory, const char *path, struct windrow_solver *solver, uint64_t fingerprint,
                                        uint64_t generation, uint64_t *bytes, uint64_t *checksum);
/* Loads it back into a fresh solver of the same web and method. WINDROW_DAMAGED: the file is not what its checksum says, or not
 * for this solver, whose vectors then hold nothing of use. */
enum windrow_status windrow_state_read(const char *path, struct windrow_solver *solver, uint64_t fingerprint, uint64_t generation,
                                       uint64_t bytes, uint64_t checksum);

#endif
