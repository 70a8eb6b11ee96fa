/* fold: brings the pages of a batch to what they stand for, as the batch is written.
 *
 * Three things may stand in a page's place, one after another:
 *   names    an id's page; an id without a name drops its links as malformed, one of another scheme as `scheme`
 *   drop     nothing, for pages that names or aliases lead to (the others were looked at before they came here)
 *   aliases  what an alias is folded into
 * The tables are read front to back beside the batch's sorted keys. What comes out is for each page the page that takes its
 * place, or the reason for which its links are dropped.
 */
#ifndef WINDROW_SHARD_FOLD_H
#define WINDROW_SHARD_FOLD_H

#include "shard/alias.h"
#include "shard/drop.h"
#include "shard/names.h"
#include "store/ledger.h"

/* What is told of an id that has no name: where it was first seen in this batch. */
typedef enum windrow_status (*windrow_fold_unnamed)(void *context, uint64_t file, uint64_t line, uint64_t id);

struct windrow_fold {
    const char *scratch;                         /* where the tables are */
    bool with_names, with_aliases;
    struct windrow_names_facts names;
    struct windrow_alias_facts aliases;
    struct windrow_drop_set *drop;               /* NULL: nothing is taken down */
};

/* Looks at a job's --names, --aliases and --drop files. *fingerprint stands for their contents (of a pipe, its name alone), as far as
 * they make a difference. `scratch` must outlive the fold. */
enum windrow_status windrow_fold_open(const struct windrow_shard_options *options, const char *scratch, struct windrow_fold *fold,
                                      uint64_t *fingerprint);
void windrow_fold_close(struct windrow_fold *fold); /* all zero is fine */

/* Makes the tables that are not made yet; the ledger's records "names" and "aliases" (their facts) say which are. */
enum windrow_status windrow_fold_prepare(struct windrow_fold *fold, const struct windrow_shard_options *options, struct windrow_ledger *ledger,
                                         uint64_t memory_bytes, struct windrow_meter *meter);

/* True when there is anything to be done at all. */
bool windrow_fold_needed(const struct windrow_fold *fold);

/* Where a fold finds and adds pages: the batch. Local ids count from 0 in the order of being added. */
struct windrow_fold_pages {
    void *batch;
    size_t (*count)(const void *batch);
    const uint8_t *(*key)(const void *batch, uint32_t page, uint32_t *key_bytes);
    enum windrow_status (*add)(void *batch, const uint8_t *key, size_t key_bytes, uint32_t *page); /* finds it when it is there */
};

/* In place of a page: its links are dropped for reason `drop`. */
#define WINDROW_FOLD_DROPPED(drop) (UINT32_MAX - (uint32_t)(drop))
static inline bool windrow_fold_is_dropped(uint32_t place)
{
    return place > WINDROW_FOLD_DROPPED(WINDROW_DROP_COUNT);
}
static inline enum windrow_drop windrow_fold_reason(uint32_t place)
{
    return (enum windrow_drop)(UINT32_MAX - place);
}

/* Finds what takes each page's place: (*places)[page], for all pages, those included that it added; the caller frees it. Takes 21
 * bytes a page meanwhile. */
enum windrow_status windrow_fold_run(const struct windrow_fold *fold, const struct windrow_fold_pages *pages, uint32_t **places);

#endif
