/*
 * Inside the store: connections, statements, and the two ways to use them (read, write).
 *
 * A connection belongs to one thread at a time. Statements are prepared once a connection and found
 * again by the address of their constant SQL text.
 */
#ifndef STORE_DB_H
#define STORE_DB_H

#include <pthread.h>
#include <sqlite3.h>

#include "ebbmark/store.h"
#include "lock.h"

#define DB_STATEMENTS_MAX 512u /* slots of the cache, a power of two; half of them may be used */

struct db {
    sqlite3 *handle;
    size_t statement_count;
    struct db_slot {
        const char *sql;
        sqlite3_stmt *statement;
    } slots[DB_STATEMENTS_MAX];
};

struct store {
    char *path; /* without symbolic links, where the file was there already */
    struct lock lock_file;
    bool foreign;           /* the file is not ours: leave nothing beside it */
    int version;            /* set while opening, then constant */
    struct db writer;       /* belongs to the thread whose turn it is */
    struct db *readers;     /* reader_count of them; set while opening, then constant */
    size_t reader_count;    /* those that are open */
    pthread_mutex_t adding; /* held by the thread that stores a consensus run */
    pthread_mutex_t lock;   /* guards the fields below */
    pthread_cond_t turned;  /* `turn` moved on */
    uint64_t tickets, turn; /* writers come in the order they asked, so that none starves */
    pthread_cond_t returned;
    struct db **idle; /* the readers that nobody uses, idle_count of them */
    size_t idle_count;
};

/* Open one connection with the settings all connections share. */
enum db_use { DB_WRITES, DB_READS };
bool db_open(struct db *db, const char *path, enum db_use use, struct base_error *error);
void db_close(struct db *db);

/* Fill error with what went wrong on this connection last; returns false. `doing` begins a
 * sentence: "Reading the backup". */
bool db_fail(struct db *db, const char *doing, struct base_error *error);

/* Run SQL that gives no rows and takes no values, such as a whole migration. */
bool db_script(struct db *db, const char *sql, struct base_error *error);

/* Bind values to the cached statement of this constant SQL. `kinds` has one letter a value: i
 * int64_t, r double (NAN becomes NULL), t text (NULL becomes NULL), b blob and its size_t size.
 * NULL on failure. Texts and blobs must live until db_done. */
sqlite3_stmt *db_bind(struct db *db, const char *sql, struct base_error *error, const char *kinds,
                      ...);

/* The next row: 1; no more: 0; failure: -1 with the error filled. */
int db_next(struct db *db, sqlite3_stmt *statement, struct base_error *error);

/* Give a bound statement back to the cache. NULL is allowed. */
void db_done(sqlite3_stmt *statement);

/* Bind, step to the end, give back. */
#define db_run(db, error, sql, ...)                                                                \
    db_finish((db), db_bind((db), (sql), (error), __VA_ARGS__), (error))
bool db_finish(struct db *db, sqlite3_stmt *statement, struct base_error *error);

/* A reading connection; waits for one when all are busy. Give it back. */
struct db *db_read(struct store *store);
void db_read_end(struct store *store, struct db *db);

/* Copy a blob that must have this size; BASE_CORRUPT when it has not. */
bool db_blob(struct db *db, sqlite3_stmt *row, int column, void *out, size_t size,
             struct base_error *error);

/* The writing connection inside a transaction, to this thread alone; NULL on failure. db_write_end
 * commits when ok (and returns whether that worked) or takes everything back. Both must be paired.
 */
struct db *db_write(struct store *store, struct base_error *error);
bool db_write_end(struct store *store, bool ok, struct base_error *error);

/* Values of the current row. */
double db_real(sqlite3_stmt *row, int column);                                /* NAN for NULL */
const char *db_text(sqlite3_stmt *row, int column, struct base_arena *arena); /* NULL: no memory */

/* A list of unknown length, grown in an arena: returns room for one more item of `size` bytes and
 * moves the items when the array must grow. NULL: no memory (error filled). */
struct db_list {
    void *items;
    size_t count, capacity;
};
void *db_list_add(struct db_list *list, struct base_arena *arena, size_t size,
                  struct base_error *error);

/* Read all rows of a question into an array in the arena: fill(row, arena, item) takes one row,
 * false meaning no memory. `*items` is the array (NULL when there are none). */
bool db_rows(struct store *store, struct base_arena *arena, size_t size,
             bool (*fill)(sqlite3_stmt *row, struct base_arena *arena, void *item), void *items,
             size_t *count, struct base_error *error, const char *sql, const char *kinds, ...);

/* Read the one row of a question into *item. BASE_NOT_FOUND with the sentence when there is none.
 */
bool db_row(struct store *store, struct base_arena *arena,
            bool (*fill)(sqlite3_stmt *row, struct base_arena *arena, void *item), void *item,
            const char *missing, struct base_error *error, const char *sql, const char *kinds, ...);

/* Run one change in a transaction of its own; BASE_NOT_FOUND with `missing`, unless that is NULL,
 * when it touches no row. */
bool db_change(struct store *store, const char *missing, struct base_error *error, const char *sql,
               const char *kinds, ...);

/* BASE_MEMORY. */
bool db_no_memory(struct base_error *error);

#endif
