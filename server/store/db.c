#include "db.h"

#include <assert.h>
#include <errno.h>
#include <math.h>
#include <stdarg.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

#define BUSY_MS 5000
#define WRITER_CACHE "PRAGMA cache_size = -65536"
#define READER_CACHE "PRAGMA cache_size = -8192"

bool db_no_memory(struct base_error *error)
{
    return base_fail(error, BASE_MEMORY, "There is not enough memory for this.");
}

static bool fail_constraint(int code, const char *doing, const char *said, struct base_error *error)
{
    if (code == SQLITE_CONSTRAINT_FOREIGNKEY)
        return base_fail(error, BASE_NOT_FOUND, "%s failed: it names something that is not there.",
                         doing);
    if (code == SQLITE_CONSTRAINT_UNIQUE || code == SQLITE_CONSTRAINT_PRIMARYKEY)
        return base_fail(error, BASE_CONFLICT, "%s failed: that is there already (%s).", doing,
                         said);
    return base_fail(error, BASE_INVALID, "%s failed: a value is not allowed (%s).", doing, said);
}

/* Is a failure of the disk one of space? SQLite tells so itself when a write of its file fails, but
 * not when the memory that it shares beside the WAL cannot grow, nor when a quota is used up. */
static bool is_full(int code, int errnum)
{
    return (code & 0xff) == SQLITE_FULL || code == SQLITE_IOERR_SHMSIZE ||
           (((code & 0xff) == SQLITE_IOERR || (code & 0xff) == SQLITE_CANTOPEN) &&
            (errnum == ENOSPC || errnum == EDQUOT));
}

bool db_fail(struct db *db, const char *doing, struct base_error *error)
{
    int code = sqlite3_extended_errcode(db->handle), errnum = sqlite3_system_errno(db->handle);
    const char *said = sqlite3_errmsg(db->handle);
    if (is_full(code, errnum))
        return base_fail(error, BASE_DISK_FULL,
                         "%s failed: the disk is full. Nothing was stored; free some space and try "
                         "again.",
                         doing);
    switch (code & 0xff) {
    case SQLITE_NOMEM:
        return db_no_memory(error);
    case SQLITE_CONSTRAINT:
        return fail_constraint(code, doing, said, error);
    case SQLITE_BUSY:
    case SQLITE_LOCKED:
        return base_fail(error, BASE_BUSY,
                         "%s failed: another program holds the database; close that and try again.",
                         doing);
    case SQLITE_CORRUPT:
    case SQLITE_NOTADB:
        return base_fail(error, BASE_CORRUPT,
                         "%s failed: the file is damaged (%s). Keep a copy of it and restore the "
                         "newest backup.",
                         doing, said);
    case SQLITE_READONLY:
    case SQLITE_PERM:
        return base_fail(error, BASE_IO,
                         "%s failed: the file, its folder or its disk is read-only.", doing);
    case SQLITE_CANTOPEN:
    case SQLITE_IOERR:
        return base_fail(error, BASE_IO, "%s failed: %s (%s).", doing, said,
                         errnum != 0 ? strerror(errnum) : "no reason given");
    default:
        return base_fail(error, BASE_INTERNAL, "%s failed: %s.", doing, said);
    }
}

bool db_script(struct db *db, const char *sql, struct base_error *error)
{
    return sqlite3_exec(db->handle, sql, NULL, NULL, NULL) == SQLITE_OK ||
           db_fail(db, "Working with the database", error);
}

/* A database may come from anywhere: its own schema is not trusted with more than it needs. */
static bool settings_apply(struct db *db, enum db_use use, struct base_error *error)
{
    (void)sqlite3_extended_result_codes(db->handle, 1);
    (void)sqlite3_busy_timeout(db->handle, BUSY_MS);
    (void)sqlite3_db_config(db->handle, SQLITE_DBCONFIG_DEFENSIVE, 1, NULL);
    (void)sqlite3_db_config(db->handle, SQLITE_DBCONFIG_TRUSTED_SCHEMA, 0, NULL);
    return db_script(db,
                     "PRAGMA foreign_keys = ON; PRAGMA cell_size_check = ON;"
                     "PRAGMA temp_store = MEMORY; PRAGMA synchronous = FULL;",
                     error) &&
           db_script(db, use == DB_WRITES ? WRITER_CACHE : READER_CACHE, error);
}

bool db_open(struct db *db, const char *path, enum db_use use, struct base_error *error)
{
    *db = (struct db){0};
    int flags =
        SQLITE_OPEN_NOMUTEX |
        (use == DB_READS ? SQLITE_OPEN_READONLY : SQLITE_OPEN_READWRITE | SQLITE_OPEN_CREATE);
    bool ok = sqlite3_open_v2(path, &db->handle, flags, NULL) == SQLITE_OK;
    if (!ok && db->handle == NULL)
        return db_no_memory(error);
    ok = ok ? settings_apply(db, use, error) : db_fail(db, "Opening the database", error);
    if (!ok)
        db_close(db);
    return ok;
}

void db_close(struct db *db)
{
    for (size_t i = 0; i < DB_STATEMENTS_MAX; i++)
        (void)sqlite3_finalize(db->slots[i].statement);
    (void)sqlite3_close(db->handle);
    *db = (struct db){0};
}

/* The cached statement of this text, prepared on first use. */
static sqlite3_stmt *statement_of(struct db *db, const char *sql, struct base_error *error)
{
    size_t at = ((uintptr_t)sql >> 3) % DB_STATEMENTS_MAX;
    while (db->slots[at].sql != NULL && db->slots[at].sql != sql)
        at = (at + 1) % DB_STATEMENTS_MAX;
    if (db->slots[at].sql == NULL) {
        assert(db->statement_count < DB_STATEMENTS_MAX / 2);
        sqlite3_stmt *statement = NULL;
        if (sqlite3_prepare_v3(db->handle, sql, -1, SQLITE_PREPARE_PERSISTENT, &statement, NULL) !=
            SQLITE_OK) {
            (void)db_fail(db, "Working with the database", error);
            return NULL;
        }
        db->slots[at] = (struct db_slot){sql, statement};
        db->statement_count++;
    }
    return db->slots[at].statement;
}

static int bind_value(sqlite3_stmt *statement, int at, char kind, va_list *list)
{
    switch (kind) {
    case 'i':
        return sqlite3_bind_int64(statement, at, va_arg(*list, int64_t));
    case 'r':
        return sqlite3_bind_double(statement, at, va_arg(*list, double));
    case 't':
        return sqlite3_bind_text(statement, at, va_arg(*list, const char *), -1, SQLITE_STATIC);
    default: {
        assert(kind == 'b');
        const void *data = va_arg(*list, const void *);
        return sqlite3_bind_blob64(statement, at, data, va_arg(*list, size_t), SQLITE_STATIC);
    }
    }
}

static sqlite3_stmt *bind_list(struct db *db, const char *sql, struct base_error *error,
                               const char *kinds, va_list *list)
{
    sqlite3_stmt *statement = statement_of(db, sql, error);
    if (statement == NULL)
        return NULL;
    int code = SQLITE_OK;
    for (int i = 0; kinds[i] != '\0' && code == SQLITE_OK; i++)
        code = bind_value(statement, i + 1, kinds[i], list);
    if (code != SQLITE_OK) {
        (void)db_fail(db, "Working with the database", error);
        db_done(statement);
        return NULL;
    }
    return statement;
}

sqlite3_stmt *db_bind(struct db *db, const char *sql, struct base_error *error, const char *kinds,
                      ...)
{
    va_list list;
    va_start(list, kinds);
    sqlite3_stmt *statement = bind_list(db, sql, error, kinds, &list);
    va_end(list);
    return statement;
}

int db_next(struct db *db, sqlite3_stmt *statement, struct base_error *error)
{
    switch (sqlite3_step(statement)) {
    case SQLITE_ROW:
        return 1;
    case SQLITE_DONE:
        return 0;
    default:
        (void)db_fail(db, "Working with the database", error);
        return -1;
    }
}

void db_done(sqlite3_stmt *statement)
{
    if (statement == NULL)
        return;
    (void)sqlite3_reset(statement);
    (void)sqlite3_clear_bindings(statement);
}

bool db_finish(struct db *db, sqlite3_stmt *statement, struct base_error *error)
{
    if (statement == NULL)
        return false;
    int got;
    do
        got = db_next(db, statement, error);
    while (got == 1);
    db_done(statement);
    return got == 0;
}

struct db *db_read(struct store *store)
{
    (void)pthread_mutex_lock(&store->lock);
    while (store->idle_count == 0)
        (void)pthread_cond_wait(&store->returned, &store->lock);
    struct db *db = store->idle[--store->idle_count];
    (void)pthread_mutex_unlock(&store->lock);
    return db;
}

void db_read_end(struct store *store, struct db *db)
{
    (void)pthread_mutex_lock(&store->lock);
    store->idle[store->idle_count++] = db;
    (void)pthread_cond_signal(&store->returned);
    (void)pthread_mutex_unlock(&store->lock);
}

static void turn_wait(struct store *store)
{
    (void)pthread_mutex_lock(&store->lock);
    uint64_t ticket = store->tickets++;
    while (store->turn != ticket)
        (void)pthread_cond_wait(&store->turned, &store->lock);
    (void)pthread_mutex_unlock(&store->lock);
}

static void turn_end(struct store *store)
{
    (void)pthread_mutex_lock(&store->lock);
    store->turn++;
    (void)pthread_cond_broadcast(&store->turned);
    (void)pthread_mutex_unlock(&store->lock);
}

struct db *db_write(struct store *store, struct base_error *error)
{
    turn_wait(store);
    if (db_run(&store->writer, error, "BEGIN IMMEDIATE", ""))
        return &store->writer;
    turn_end(store);
    return NULL;
}

bool db_write_end(struct store *store, bool ok, struct base_error *error)
{
    if (ok)
        ok = db_run(&store->writer, error, "COMMIT", "");
    /* A failed statement or commit may or may not have ended the transaction by itself. Rolling
     * back needs no space, and in a WAL it writes nothing. */
    if (!ok && sqlite3_get_autocommit(store->writer.handle) == 0)
        (void)sqlite3_exec(store->writer.handle, "ROLLBACK", NULL, NULL, NULL);
    turn_end(store);
    return ok;
}

double db_real(sqlite3_stmt *row, int column)
{
    return sqlite3_column_type(row, column) == SQLITE_NULL ? NAN
                                                           : sqlite3_column_double(row, column);
}

const char *db_text(sqlite3_stmt *row, int column, struct base_arena *arena)
{
    const unsigned char *text = sqlite3_column_text(row, column);
    return base_arena_copy_text(arena, text == NULL ? "" : (const char *)text);
}

bool db_blob(struct db *db, sqlite3_stmt *row, int column, void *out, size_t size,
             struct base_error *error)
{
    const void *data = sqlite3_column_blob(row, column);
    if (data == NULL && sqlite3_errcode(db->handle) == SQLITE_NOMEM)
        return db_no_memory(error);
    if (data == NULL || (size_t)sqlite3_column_bytes(row, column) != size)
        return base_fail(error, BASE_CORRUPT,
                         "A stored value has the wrong length; restore the newest backup.");
    memcpy(out, data, size);
    return true;
}

void *db_list_add(struct db_list *list, struct base_arena *arena, size_t size,
                  struct base_error *error)
{
    if (list->count == list->capacity) {
        size_t capacity = list->capacity == 0 ? 16 : 2 * list->capacity;
        void *items = base_arena_take_array(arena, capacity, size);
        if (items == NULL) {
            (void)db_no_memory(error);
            return NULL;
        }
        if (list->count > 0)
            memcpy(items, list->items, list->count * size);
        list->items = items;
        list->capacity = capacity;
    }
    return (char *)list->items + size * list->count++;
}

bool db_rows(struct store *store, struct base_arena *arena, size_t size,
             bool (*fill)(sqlite3_stmt *row, struct base_arena *arena, void *item), void *items,
             size_t *count, struct base_error *error, const char *sql, const char *kinds, ...)
{
    struct db_list found = {0};
    struct db *db = db_read(store);
    va_list list;
    va_start(list, kinds);
    sqlite3_stmt *row = bind_list(db, sql, error, kinds, &list);
    va_end(list);
    int got = -1;
    while (row != NULL && (got = db_next(db, row, error)) == 1) {
        void *item = db_list_add(&found, arena, size, error);
        if (item == NULL || !fill(row, arena, item)) {
            (void)db_no_memory(error);
            got = -1;
            break;
        }
    }
    db_done(row);
    db_read_end(store, db);
    memcpy(items, &found.items, sizeof found.items);
    *count = found.count;
    return got == 0;
}

bool db_row(struct store *store, struct base_arena *arena,
            bool (*fill)(sqlite3_stmt *row, struct base_arena *arena, void *item), void *item,
            const char *missing, struct base_error *error, const char *sql, const char *kinds, ...)
{
    struct db *db = db_read(store);
    va_list list;
    va_start(list, kinds);
    sqlite3_stmt *row = bind_list(db, sql, error, kinds, &list);
    va_end(list);
    int got = row != NULL ? db_next(db, row, error) : -1;
    bool ok = got == 1;
    if (ok && !fill(row, arena, item))
        ok = db_no_memory(error);
    if (got == 0)
        (void)base_fail(error, BASE_NOT_FOUND, "%s", missing);
    db_done(row);
    db_read_end(store, db);
    return ok;
}

bool db_change(struct store *store, const char *missing, struct base_error *error, const char *sql,
               const char *kinds, ...)
{
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    va_list list;
    va_start(list, kinds);
    sqlite3_stmt *statement = bind_list(db, sql, error, kinds, &list);
    va_end(list);
    bool ok = db_finish(db, statement, error);
    if (ok && missing != NULL && sqlite3_changes(db->handle) == 0)
        ok = base_fail(error, BASE_NOT_FOUND, "%s", missing);
    return db_write_end(store, ok, error);
}
