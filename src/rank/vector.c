#include "rank/vector.h"

#include <errno.h>
#include <fcntl.h>
#include <string.h>
#include <xxhash.h>

#define SCORES_MAGIC "windrow scores 1"
#define STATE_MAGIC "windrow state 01"

struct scores_header {
    char magic[16];
    uint64_t pages;
    double beta;
    uint64_t fingerprint;
    uint64_t checksum;
    uint64_t generation;
    uint64_t header_checksum;
};

struct state_header {
    char magic[16];
    uint64_t core_pages;
    uint64_t sweeps;
    uint64_t next_block;
    uint64_t fingerprint;
    uint64_t state_bytes;
    uint64_t generation;
};

_Static_assert(sizeof(struct scores_header) == WINDROW_SCORES_OFFSET && sizeof(struct state_header) == 64, "headers are 64 bytes");

static uint64_t header_checksum(const struct scores_header *header)
{
    return XXH3_64bits(header, offsetof(struct scores_header, header_checksum));
}

/* ---- Scores -------------------------------------------------------------------------------- */

enum { BATCH = 8192, RELEASE_PAGES = 1 << 18 };

static enum windrow_status append_scores(struct windrow_writer *writer, const struct windrow_solver *solver,
                                         const struct windrow_store *store, uint64_t *checksum)
{
    enum windrow_status status = WINDROW_OK;
    uint64_t pages = solver->options.web->pages;
    double batch[BATCH];
    XXH3_state_t *running = XXH3_createState();
    if (!running)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while writing scores");
    XXH3_64bits_reset(running);
    for (uint64_t page = 0; !status && page < pages;) {
        size_t count = 0;
        for (; count < BATCH && page < pages; page++) {
            uint64_t number;
            batch[count++] = windrow_store_page_number(store, page, &number) ? windrow_solver_core_score(solver, number)
                                                                             : windrow_solver_rim_score(solver, number);
        }
        XXH3_64bits_update(running, batch, count * sizeof *batch);
        status = windrow_writer_append(writer, batch, count * sizeof *batch);
        if (page / RELEASE_PAGES != (page - count) / RELEASE_PAGES)
            windrow_solver_release_all(solver);
    }
    windrow_solver_release_all(solver);
    *checksum = XXH3_64bits_digest(running);
    XXH3_freeState(running);
    return status;
}

/* The header comes last: it holds the checksum of what follows it. */
static enum windrow_status write_header(const char *path, const struct scores_header *header)
{
    int descriptor = windrow_files.open(path, O_WRONLY, 0);
    if (descriptor < 0)
        return windrow_fail_system(WINDROW_RESOURCE, errno, "cannot open %s", path);
    enum windrow_status status = windrow_file_write_at(descriptor, path, header, sizeof *header, 0);
    if (!status && windrow_files.sync_data(descriptor))
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot sync %s", path);
    if (windrow_files.close(descriptor) && !status)
        status = windrow_fail_system(WINDROW_RESOURCE, errno, "cannot close %s", path);
    return status;
}

enum windrow_status windrow_scores_write(const char *directory, const char *path, const struct windrow_solver *solver,
                                         const struct windrow_store *store, uint64_t generation, uint64_t *checksum)
{
    struct windrow_writer writer = {.descriptor = -1};
    struct scores_header header = {
        .magic = SCORES_MAGIC,
        .pages = solver->options.web->pages,
        .beta = solver->options.beta,
        .fingerprint = windrow_store_facts(store)->fingerprint,
        .generation = generation,
    };
    const struct scores_header empty = {0};
    enum windrow_status status = windrow_writer_open(&writer, path, false);
    if (!status)
        status = windrow_writer_append(&writer, &empty, sizeof empty);
    if (!status)
        status = append_scores(&writer, solver, store, checksum);
    if (!status)
        status = windrow_writer_finish(&writer, NULL);
    windrow_writer_abandon(&writer);
    if (status)
        return status;
    header.checksum = *checksum;
    header.header_checksum = header_checksum(&header);
    status = write_header(path, &header);
    return status ? status : windrow_directory_sync(directory);
}

enum windrow_status windrow_scores_open(const char *path, uint64_t pages, uint64_t generation, struct windrow_map *map, const double **scores)
{
    enum windrow_status status = windrow_map_open(map, path);
    if (status)
        return status;
    struct scores_header header;
    if (map->bytes < sizeof header || map->bytes != WINDROW_SCORES_OFFSET + pages * sizeof(double))
        goto damaged;
    memcpy(&header, map->data, sizeof header);
    if (memcmp(header.magic, SCORES_MAGIC, sizeof header.magic) || header.header_checksum != header_checksum(&header) ||
        header.pages != pages || header.generation != generation)
        goto damaged;
    *scores = (const double *)(const void *)(map->data + WINDROW_SCORES_OFFSET);
    return WINDROW_OK;
damaged:
    windrow_map_close(map);
    return windrow_fail(WINDROW_DAMAGED, "%s is not the vector of scores that it should be; rank again with --fresh", path);
}

/* ---- Checkpoints --------------------------------------------------------------------------- */

/* Vectors are written and read in parts, each let go of before the next. */
enum { PART_BYTES = 1 << 20 };

static uint64_t part_bytes(const struct windrow_solver_vector *vector, uint64_t at)
{
    return vector->bytes - at < PART_BYTES ? vector->bytes - at : PART_BYTES;
}

static enum windrow_status append_hashed(struct windrow_writer *writer, XXH3_state_t *running, const void *data, uint64_t bytes)
{
    if (bytes == 0)
        return WINDROW_OK;
    XXH3_64bits_update(running, data, bytes);
    return windrow_writer_append(writer, data, bytes);
}

enum windrow_status windrow_state_write(const char *directory, const char *path, struct windrow_solver *solver, uint64_t fingerprint,
                                        uint64_t generation, uint64_t *bytes, uint64_t *checksum)
{
    struct windrow_writer writer = {.descriptor = -1};
    struct state_header header = {
        .magic = STATE_MAGIC,
        .core_pages = solver->options.web->core_pages,
        .sweeps = solver->state.sweeps,
        .next_block = solver->state.next_block,
        .fingerprint = fingerprint,
        .state_bytes = sizeof solver->state,
        .generation = generation,
    };
    struct windrow_solver_vector vectors[WINDROW_SOLVER_VECTORS_MOST];
    unsigned count = windrow_solver_vectors(solver, vectors);
    enum windrow_status status = WINDROW_OK;
    XXH3_state_t *running = XXH3_createState();
    if (!running)
        return windrow_fail(WINDROW_RESOURCE, "out of memory while saving a checkpoint");
    XXH3_64bits_reset(running);
    if ((status = windrow_writer_open(&writer, path, false)))
        goto out;
    if ((status = append_hashed(&writer, running, &header, sizeof header)))
        goto out;
    if ((status = append_hashed(&writer, running, &solver->state, sizeof solver->state)))
        goto out;
    for (unsigned v = 0; v < count; v++)
        for (uint64_t at = 0; at < vectors[v].bytes; at += PART_BYTES) {
            uint64_t bytes_now = part_bytes(&vectors[v], at);
            uint8_t *data = (uint8_t *)vectors[v].data + at;
            if ((status = append_hashed(&writer, running, data, bytes_now)))
                goto out;
            windrow_solver_release(solver, data, bytes_now);
        }
    *checksum = XXH3_64bits_digest(running);
    if ((status = windrow_writer_append(&writer, checksum, sizeof *checksum)))
        goto out;
    *bytes = writer.written_bytes;
    if ((status = windrow_writer_finish(&writer, NULL)))
        goto out;
    status = windrow_directory_sync(directory);
out:
    windrow_writer_abandon(&writer);
    XXH3_freeState(running);
    return status;
}

static enum windrow_status read_hashed(int descriptor, const char *path, uint64_t *offset, XXH3_state_t *running, void *data, uint64_t bytes)
{
    if (bytes == 0)
        return WINDROW_OK;
    enum windrow_status status = windrow_file_read_at(descriptor, path, data, bytes, *offset);
    if (status)
        return status;
    XXH3_64bits_update(running, data, bytes);
    *offset += bytes;
    return WINDROW_OK;
}

enum windrow_status windrow_state_read(const char *path, struct windrow_solver *solver, uint64_t fingerprint, uint64_t generation,
                                       uint64_t bytes, uint64_t checksum)
{
    struct windrow_solver_vector vectors[WINDROW_SOLVER_VECTORS_MOST];
    struct state_header header;
    struct windrow_solver_state state;
    unsigned count = windrow_solver_vectors(solver, vectors);
    uint64_t offset = 0, expected = sizeof header + sizeof state + sizeof(uint64_t), stored = 0;
    for (unsigned v = 0; v < count; v++)
        expected += vectors[v].bytes;
    enum windrow_status status = WINDROW_OK;
    int descriptor = windrow_files.open(path, O_RDONLY, 0);
    if (descriptor < 0)
        return windrow_fail_system(WINDROW_DAMAGED, errno, "cannot open the checkpoint %s", path);
    XXH3_state_t *running = XXH3_createState();
    if (!running) {
        status = windrow_fail(WINDROW_RESOURCE, "out of memory while loading a checkpoint");
        goto out;
    }
    XXH3_64bits_reset(running);
    if ((status = read_hashed(descriptor, path, &offset, running, &header, sizeof header)))
        goto out;
    if (bytes != expected || memcmp(header.magic, STATE_MAGIC, sizeof header.magic) || header.core_pages != solver->options.web->core_pages ||
        header.fingerprint != fingerprint || header.state_bytes != sizeof state || header.generation != generation) {
        status = windrow_fail(WINDROW_DAMAGED, "%s is not the checkpoint that the ledger names", path);
        goto out;
    }
    if ((status = read_hashed(descriptor, path, &offset, running, &state, sizeof state)))
        goto out;
    for (unsigned v = 0; v < count; v++)
        for (uint64_t at = 0; at < vectors[v].bytes; at += PART_BYTES) {
            uint64_t bytes_now = part_bytes(&vectors[v], at);
            uint8_t *data = (uint8_t *)vectors[v].data + at;
            if ((status = read_hashed(descriptor, path, &offset, running, data, bytes_now)))
                goto out;
            windrow_solver_release(solver, data, bytes_now);
        }
    if ((status = windrow_file_read_at(descriptor, path, &stored, sizeof stored, offset)))
        goto out;
    if (XXH3_64bits_digest(running) != checksum || stored != checksum) {
        status = windrow_fail(WINDROW_DAMAGED, "the checkpoint %s does not have the checksum that the ledger names", path);
        goto out;
    }
    solver->state = state;
out:
    windrow_files.close(descriptor);
    XXH3_freeState(running);
    return status;
}
