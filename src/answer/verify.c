/* Reads a store and all its runs back. */
#include "base/crew.h"
#include "rank/run.h"
#include "store/ledger.h"
#include "store/store.h"

#include <stdlib.h>

struct verification {
    const struct windrow_store *store;
    void (*found)(void *context, const char *damage);
    void *context;
    bool any;
};

static void note_damage(void *context, const char *damage)
{
    struct verification *verification = context;
    verification->any = true;
    verification->found(verification->context, damage);
}

static enum windrow_status verify_run(void *context, const char *name)
{
    struct verification *verification = context;
    char *ledger = windrow_path(windrow_store_path(verification->store), "runs/%s/ledger", name);
    enum windrow_status status = ledger ? windrow_ledger_verify(ledger) : windrow_fail(WINDROW_RESOURCE, "out of memory");
    free(ledger);
    if (status == WINDROW_DAMAGED) {
        note_damage(verification, windrow_message());
        return WINDROW_OK;
    }
    if (status)
        return status;
    status = windrow_run_verify(verification->store, name, note_damage, verification);
    return status == WINDROW_NO ? WINDROW_OK : status; /* the other runs are looked at all the same */
}

enum windrow_status windrow_verify(const char *path, unsigned threads, void (*found)(void *context, const char *damage),
                                   void *context, const struct windrow_watch *watch)
{
    struct verification verification = {.found = found, .context = context};
    struct windrow_store *store = NULL;
    enum windrow_status status = windrow_store_verify(path, threads ? threads : windrow_crew_default_workers(), note_damage, &verification, watch);
    if (status && !(status == WINDROW_NO && verification.any))
        return status;
    /* A damaged store may not open, and its runs cannot be told from those of another then. */
    if ((status = windrow_store_open(path, &store))) {
        if (verification.any && (status == WINDROW_DAMAGED || status == WINDROW_NO))
            status = WINDROW_OK;
    } else {
        verification.store = store;
        status = windrow_run_each(store, verify_run, &verification);
    }
    windrow_store_close(store);
    char *ledger = windrow_path(path, "ledger");
    enum windrow_status job = ledger ? windrow_ledger_verify(ledger) : windrow_fail(WINDROW_RESOURCE, "out of memory");
    free(ledger);
    if (job == WINDROW_DAMAGED)
        note_damage(&verification, windrow_message());
    else if (!status)
        status = job;
    if (!status && verification.any)
        status = windrow_fail(WINDROW_NO, "%s is damaged", path);
    return status;
}

enum windrow_status windrow_sizes_read(const char *path, struct windrow_store_sizes *sizes, uint64_t *links)
{
    struct windrow_store *store = NULL;
    enum windrow_status status = windrow_store_open(path, &store);
    if (status)
        return status;
    *links = windrow_store_facts(store)->links;
    status = windrow_store_sizes(store, sizes);
    windrow_store_close(store);
    return status;
}
