/* manifest: what a finished store knows of itself, in one LMDB environment, written once.
 *
 * Records in key order (every value ends with the XXH3-64 of its key and the rest of the value):
 *   block/core/NNNNNNNNNNNN, block/rim/NNNNNNNNNNNN   struct windrow_block_record, see FORMAT.md
 *   facts                                             counts
 *   file/NAME                                         bytes and XXH3-64 of each file of the store
 *   format                                            version of all layouts
 *   library/NAME                                      version of a library that shapes the result
 * No times and no paths: equal stores have equal records. The file "seal" beside it holds the checksum of
 * LMDB's data file and is looked at before LMDB opens that file, since LMDB trusts what it reads.
 */
#ifndef WINDROW_STORE_MANIFEST_H
#define WINDROW_STORE_MANIFEST_H

#include "store/store.h"

#define WINDROW_FORMAT_VERSION 1

struct windrow_manifest_file {
    char *name;       /* relative to the store */
    uint64_t bytes;
    uint64_t checksum;
};

struct windrow_manifest {
    struct windrow_store_facts facts;
    struct windrow_block_record *blocks[WINDROW_BLOCK_KINDS];
    uint64_t block_counts[WINDROW_BLOCK_KINDS];
    struct windrow_manifest_file *files;
    size_t file_count;
    char *domain_library, *idn_library, *zstd_library;
};

/* Adds to a manifest under construction; what it takes is copied. */
enum windrow_status windrow_manifest_add_file(struct windrow_manifest *manifest, const char *name, uint64_t bytes, uint64_t checksum);
enum windrow_status windrow_manifest_add_blocks(struct windrow_manifest *manifest, enum windrow_block_kind kind,
                                                const struct windrow_block_record *records, uint64_t count);

/* Writes manifest and seal of the store at `path`; computes facts.fingerprint. The seal is the commit point. */
enum windrow_status windrow_manifest_write(const char *path, struct windrow_manifest *manifest);
/* Reads them. WINDROW_NO: there is no seal (not finished); WINDROW_DAMAGED. */
enum windrow_status windrow_manifest_read(const char *path, struct windrow_manifest *manifest);
void windrow_manifest_free(struct windrow_manifest *manifest);

/* The entry of a file; NULL when the manifest has none of that name. */
const struct windrow_manifest_file *windrow_manifest_file(const struct windrow_manifest *manifest, const char *name);

#endif
