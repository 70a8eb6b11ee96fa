/* ledger: the memory of a job, in an LMDB environment of its own.
 *
 * A job writes down what is finished as small named records. A commit takes several records at once: after
 * a crash either all of them are there or none. Invariants, which the callers keep and tests attack:
 *   L1  what a record names (files, their lengths) was made durable before the record is committed
 *   L2  a file that a record names is never written again
 *   L3  LMDB's default durability is kept: a commit that returned is on disk
 * Every record ends with the XXH3-64 of its key and value and is checked when read.
 *
 * Threads: a ledger may be used from any thread; commits are serialised inside. One environment must not
 * be opened twice in a process, and not be used after fork.
 */
#ifndef WINDROW_STORE_LEDGER_H
#define WINDROW_STORE_LEDGER_H

#include "base/file.h"

struct windrow_ledger;

#define WINDROW_LEDGER_VALUE_BYTES_MAX 1024

/* Opens the ledger in `directory`, which is made when missing unless `only_read`. WINDROW_NO: only_read, and there is none.
 * A reader may open the ledger of a running job of another process. */
enum windrow_status windrow_ledger_open(const char *directory, bool only_read, struct windrow_ledger **ledger);
void windrow_ledger_close(struct windrow_ledger *ledger); /* NULL is fine */

struct windrow_ledger_record {
    const char *key;
    const void *value;
    size_t bytes;
};

/* Writes all records in one durable transaction. */
enum windrow_status windrow_ledger_commit(struct windrow_ledger *ledger, const struct windrow_ledger_record *records, size_t count);
/* Reads a record into `value`, which must have exactly `bytes`. WINDROW_NO: there is none; WINDROW_DAMAGED. */
enum windrow_status windrow_ledger_get(struct windrow_ledger *ledger, const char *key, void *value, size_t bytes);
/* Calls `each` for every record whose key begins with `prefix`, in key order, until it returns non-zero. */
enum windrow_status windrow_ledger_each(struct windrow_ledger *ledger, const char *prefix,
                                        enum windrow_status (*each)(void *context, const char *key, const void *value, size_t bytes), void *context);

/* Reads a ledger back: whole pages, every record right. WINDROW_DAMAGED, also when there is none. LMDB touches its file
 * as memory, so a file that was cut may end the process with SIGBUS. */
enum windrow_status windrow_ledger_verify(const char *directory);

/* A lock on a directory's job: held as long as the file descriptor is open, gone when the process dies.
 * WINDROW_RESOURCE: another process holds it. */
enum windrow_status windrow_ledger_lock(const char *lock_path, int *descriptor);
/* True when some process holds the lock. */
bool windrow_ledger_locked(const char *lock_path);

#endif
