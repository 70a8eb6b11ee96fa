#include "store/ledger.h"

#include <errno.h>
#include <fcntl.h>
#include <lmdb.h>
#include <stdlib.h>
#include <string.h>
#include <sys/file.h>
#include <sys/stat.h>
#include <unistd.h>
#include <xxhash.h>

#define MAP_BYTES ((size_t)1 << 34)
#define KEY_BYTES_MOST 200

struct windrow_ledger {
    MDB_env *environment;
    MDB_dbi database;
    char *directory;
};

static enum windrow_status failure(const struct windrow_ledger *ledger, int code)
{
    switch (code) {
    case ENOSPC: case EDQUOT: case ENOMEM: case EIO: case MDB_MAP_FULL: case EACCES: case EROFS:
        return windrow_fail(WINDROW_RESOURCE, "cannot write the ledger %s: %s", ledger->directory, mdb_strerror(code));
    default:
        return windrow_fail(WINDROW_DAMAGED, "the ledger %s cannot be used: %s", ledger->directory, mdb_strerror(code));
    }
}

enum windrow_status windrow_ledger_open(const char *directory, bool only_read, struct windrow_ledger **out)
{
    *out = NULL;
    char *data = windrow_path(directory, "data.mdb");
    if (!data)
        return windrow_fail(WINDROW_RESOURCE, "out of memory for a ledger");
    /* An empty file is one that a writer was about to begin: readers find nothing there, the next writer begins. */
    struct stat facts;
    bool exists = stat(data, &facts) == 0 && facts.st_size > 0;
    free(data);
    if (only_read && !exists)
        return windrow_fail(WINDROW_NO, "there is no ledger in %s", directory);
    enum windrow_status status = only_read ? WINDROW_OK : windrow_directory_make(directory);
    if (status)
        return status;
    struct windrow_ledger *ledger = calloc(1, sizeof *ledger);
    if (!ledger || !(ledger->directory = strdup(directory))) {
        free(ledger);
        return windrow_fail(WINDROW_RESOURCE, "out of memory for a ledger");
    }
    MDB_txn *transaction = NULL;
    int code = mdb_env_create(&ledger->environment);
    if (!code)
        code = mdb_env_set_mapsize(ledger->environment, MAP_BYTES);
    /* MDB_NOTLS: readers are not tied to threads, since crews come and go. */
    if (!code)
        code = mdb_env_open(ledger->environment, directory, (only_read ? MDB_RDONLY : 0) | MDB_NOTLS, 0644);
    if (code == EACCES || code == EROFS) /* a reader without the right to write the lock file */
        code = only_read ? mdb_env_open(ledger->environment, directory, MDB_RDONLY | MDB_NOTLS | MDB_NOLOCK, 0644) : code;
    if (!code) {
        int dead;
        code = mdb_reader_check(ledger->environment, &dead);
    }
    if (!code)
        code = mdb_txn_begin(ledger->environment, NULL, only_read ? MDB_RDONLY : 0, &transaction);
    if (!code)
        code = mdb_dbi_open(transaction, NULL, 0, &ledger->database);
    if (!code) {
        code = mdb_txn_commit(transaction);
        transaction = NULL;
    }
    if (transaction)
        mdb_txn_abort(transaction);
    if (code) {
        status = failure(ledger, code);
        windrow_ledger_close(ledger);
        return status;
    }
    if (!only_read && !exists && (status = windrow_directory_sync(directory))) {
        windrow_ledger_close(ledger);
        return status;
    }
    *out = ledger;
    return WINDROW_OK;
}

void windrow_ledger_close(struct windrow_ledger *ledger)
{
    if (!ledger)
        return;
    if (ledger->environment)
        mdb_env_close(ledger->environment);
    free(ledger->directory);
    free(ledger);
}

static uint64_t checksum(const char *key, const void *value, size_t bytes)
{
    uint8_t joined[KEY_BYTES_MOST + 1 + WINDROW_LEDGER_VALUE_BYTES_MAX];
    size_t key_bytes = strlen(key) + 1;
    memcpy(joined, key, key_bytes);
    if (bytes)
        memcpy(joined + key_bytes, value, bytes);
    return XXH3_64bits(joined, key_bytes + bytes);
}

enum windrow_status windrow_ledger_commit(struct windrow_ledger *ledger, const struct windrow_ledger_record *records, size_t count)
{
    MDB_txn *transaction;
    int code = mdb_txn_begin(ledger->environment, NULL, 0, &transaction);
    if (code)
        return failure(ledger, code);
    for (size_t index = 0; index < count && !code; index++) {
        const struct windrow_ledger_record *record = &records[index];
        uint8_t sealed[WINDROW_LEDGER_VALUE_BYTES_MAX + 8];
        if (record->bytes > WINDROW_LEDGER_VALUE_BYTES_MAX || strlen(record->key) > KEY_BYTES_MOST) {
            mdb_txn_abort(transaction);
            return windrow_fail(WINDROW_BUG, "the ledger record %s is too long", record->key);
        }
        if (record->bytes)
            memcpy(sealed, record->value, record->bytes);
        uint64_t sum = checksum(record->key, record->value, record->bytes);
        memcpy(sealed + record->bytes, &sum, 8);
        MDB_val key = {strlen(record->key), (void *)record->key}, value = {record->bytes + 8, sealed};
        code = mdb_put(transaction, ledger->database, &key, &value, 0);
    }
    if (code)
        mdb_txn_abort(transaction);
    else
        code = mdb_txn_commit(transaction);
    return code ? failure(ledger, code) : WINDROW_OK;
}

static enum windrow_status check(const struct windrow_ledger *ledger, const char *key, const MDB_val *value)
{
    bool good = value->mv_size >= 8 && value->mv_size <= WINDROW_LEDGER_VALUE_BYTES_MAX + 8;
    if (good) {
        uint64_t sum;
        memcpy(&sum, (const uint8_t *)value->mv_data + value->mv_size - 8, 8);
        good = sum == checksum(key, value->mv_data, value->mv_size - 8);
    }
    return good ? WINDROW_OK : windrow_fail(WINDROW_DAMAGED, "the record %s of the ledger %s is damaged", key, ledger->directory);
}

enum windrow_status windrow_ledger_get(struct windrow_ledger *ledger, const char *key, void *out, size_t bytes)
{
    MDB_txn *transaction;
    int code = mdb_txn_begin(ledger->environment, NULL, MDB_RDONLY, &transaction);
    if (code)
        return failure(ledger, code);
    MDB_val lmdb_key = {strlen(key), (void *)key}, value;
    enum windrow_status status = WINDROW_OK;
    code = mdb_get(transaction, ledger->database, &lmdb_key, &value);
    if (code == MDB_NOTFOUND)
        status = WINDROW_NO;
    else if (code)
        status = failure(ledger, code);
    else if (!(status = check(ledger, key, &value))) {
        if (value.mv_size - 8 != bytes)
            status = windrow_fail(WINDROW_DAMAGED, "the record %s of the ledger %s has another size", key, ledger->directory);
        else if (bytes)
            memcpy(out, value.mv_data, bytes);
    }
    mdb_txn_abort(transaction);
    return status;
}

enum windrow_status windrow_ledger_each(struct windrow_ledger *ledger, const char *prefix,
                                        enum windrow_status (*each)(void *context, const char *key, const void *value, size_t bytes), void *context)
{
    MDB_txn *transaction;
    MDB_cursor *cursor;
    int code = mdb_txn_begin(ledger->environment, NULL, MDB_RDONLY, &transaction);
    if (code)
        return failure(ledger, code);
    if ((code = mdb_cursor_open(transaction, ledger->database, &cursor))) {
        mdb_txn_abort(transaction);
        return failure(ledger, code);
    }
    enum windrow_status status = WINDROW_OK;
    MDB_val key = {strlen(prefix), (void *)prefix}, value;
    /* LMDB refuses an empty key, even to look for. */
    for (code = mdb_cursor_get(cursor, &key, &value, *prefix ? MDB_SET_RANGE : MDB_FIRST); !code && !status; code = mdb_cursor_get(cursor, &key, &value, MDB_NEXT)) {
        char name[KEY_BYTES_MOST + 1];
        if (key.mv_size > KEY_BYTES_MOST || key.mv_size < strlen(prefix) || memcmp(key.mv_data, prefix, strlen(prefix)))
            break;
        memcpy(name, key.mv_data, key.mv_size);
        name[key.mv_size] = 0;
        if (!(status = check(ledger, name, &value)))
            status = each(context, name, value.mv_data, value.mv_size - 8);
    }
    if (!status && code && code != MDB_NOTFOUND)
        status = failure(ledger, code);
    mdb_cursor_close(cursor);
    mdb_txn_abort(transaction);
    return status;
}

static enum windrow_status pass(void *context, const char *key, const void *value, size_t bytes)
{
    (void)context;
    (void)key;
    (void)value;
    (void)bytes;
    return WINDROW_OK;
}

enum windrow_status windrow_ledger_verify(const char *directory)
{
    struct windrow_ledger *ledger = NULL;
    struct stat facts;
    char *data = windrow_path(directory, "data.mdb");
    if (!data)
        return windrow_fail(WINDROW_RESOURCE, "out of memory for a ledger");
    enum windrow_status status = WINDROW_OK;
    if (stat(data, &facts))
        status = windrow_fail_system(WINDROW_DAMAGED, errno, "cannot look at %s", data);
    else if (facts.st_size % sysconf(_SC_PAGESIZE))
        status = windrow_fail(WINDROW_DAMAGED, "%s has %lld bytes, which are not whole pages: it was cut", data, (long long)facts.st_size);
    if (!status)
        status = windrow_ledger_open(directory, true, &ledger);
    if (!status) {
        /* LMDB knows the last page that it ever took. A page or two at the end may never have been written, when they were
         * given back within their own transaction. */
        MDB_envinfo info;
        mdb_env_info(ledger->environment, &info);
        if ((uint64_t)facts.st_size / (uint64_t)sysconf(_SC_PAGESIZE) + 2 < info.me_last_pgno + 1)
            status = windrow_fail(WINDROW_DAMAGED, "%s has %lld bytes and should have %llu pages: it was cut", data, (long long)facts.st_size,
                                  (unsigned long long)info.me_last_pgno + 1);
    }
    if (!status)
        status = windrow_ledger_each(ledger, "", pass, NULL);
    windrow_ledger_close(ledger);
    free(data);
    return status == WINDROW_NO ? WINDROW_DAMAGED : status;
}

enum windrow_status windrow_ledger_lock(const char *lock_path, int *descriptor)
{
    *descriptor = windrow_files.open(lock_path, O_RDWR | O_CREAT, 0666);
    if (*descriptor < 0)
        return windrow_fail_system(WINDROW_RESOURCE, errno, "cannot open the lock %s", lock_path);
    if (flock(*descriptor, LOCK_EX | LOCK_NB)) {
        int error_number = errno;
        windrow_files.close(*descriptor);
        *descriptor = -1;
        if (error_number == EWOULDBLOCK)
            return windrow_fail(WINDROW_RESOURCE, "another windrow is working here (it holds %s); wait for it or stop it", lock_path);
        return windrow_fail_system(WINDROW_RESOURCE, error_number, "cannot lock %s", lock_path);
    }
    return WINDROW_OK;
}

bool windrow_ledger_locked(const char *lock_path)
{
    int descriptor = windrow_files.open(lock_path, O_RDONLY, 0);
    if (descriptor < 0)
        return false;
    bool locked = flock(descriptor, LOCK_SH | LOCK_NB) != 0 && errno == EWOULDBLOCK;
    windrow_files.close(descriptor);
    return locked;
}
