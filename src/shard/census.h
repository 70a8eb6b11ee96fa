/* census: counts what a reading of dumps comes to: pages, links, hosts, and pages that may be one.
 *
 * Workers take turns at the places (shard/places.h), bring URLs to page keys as sharding does, and each count into
 * samples of their own (shard/sample.h), which are joined in the end. Chunks spread over all that is read are
 * written aside as a dump of their own, for sharding on trial.
 */
#ifndef WINDROW_SHARD_CENSUS_H
#define WINDROW_SHARD_CENSUS_H

#include "base/crew.h"
#include "base/meter.h"
#include "shard/places.h"
#include "shard/sample.h"

struct windrow_census_options {
    struct windrow_places *places;
    struct windrow_crew *crew;
    struct windrow_meter *meter;  /* counts URL fields */
    uint64_t memory_bytes;        /* for the samples */
    bool keep_nofollow;
    const char *trial_path;       /* the dump for trial */
    uint64_t trial_bytes;         /* about this long at most */
};

struct windrow_census {
    uint64_t bytes, lines, fields;  /* read */
    uint32_t places;
    double unevenness;              /* standard error of the fields in all, as a share, for what was read in places */
    struct windrow_sample pages;    /* group: what variants share; aspects: all three; note[0]: features (shard/variants.h) */
    struct windrow_sample hosts;
    struct windrow_sample links;    /* note: group and identity of the target */
    uint64_t trial_bytes;
    enum windrow_shape trial_shape; /* AUTO when there are several */
};

enum windrow_status windrow_census_take(const struct windrow_census_options *options, struct windrow_census *census);
void windrow_census_free(struct windrow_census *census);

#endif
