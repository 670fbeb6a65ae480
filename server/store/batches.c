#include "db.h"

bool store_batch_begin(struct store *store, const char *name, const char *source, int64_t now_ms,
                       int64_t *id, bool *resumed, struct base_error *error)
{
    static const char find[] = "SELECT id, state FROM batch WHERE name = ?";
    static const char make[] =
        "INSERT INTO batch (name, source, state, begun_ms) VALUES (?, ?, 1, ?)";
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    sqlite3_stmt *row = db_bind(db, find, error, "t", name);
    int got = row != NULL ? db_next(db, row, error) : -1;
    int state = got == 1 ? sqlite3_column_int(row, 1) : 0;
    *id = got == 1 ? sqlite3_column_int64(row, 0) : 0;
    *resumed = got == 1;
    db_done(row);
    bool ok = got >= 0;
    if (got == 1 && state != STORE_BATCH_LOADING)
        ok = base_fail_field(error, BASE_CONFLICT, "batch",
                             "There is a batch %s already; give this one another name.", name);
    if (got == 0) {
        ok = db_run(db, error, make, "tti", name, source, now_ms);
        *id = sqlite3_last_insert_rowid(db->handle);
    }
    return db_write_end(store, ok, error);
}

bool store_batch_finish(struct store *store, int64_t id, int64_t now_ms, struct base_error *error)
{
    /* One that was withdrawn while it was loaded stays withdrawn. */
    return db_change(store, "There is no such batch.", error,
                     "UPDATE batch SET state = iif(state = 1, 2, state),"
                     " finished_ms = iif(finished_ms = 0, ?, finished_ms) WHERE id = ?",
                     "ii", now_ms, id);
}

bool store_batch_withdraw(struct store *store, int64_t id, int64_t now_ms, struct base_error *error)
{
    return db_change(store, "There is no such batch.", error,
                     "UPDATE batch SET state = 3,"
                     " finished_ms = iif(finished_ms = 0, ?, finished_ms) WHERE id = ?",
                     "ii", now_ms, id);
}

static bool fill_batch(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_batch *batch = item;
    *batch = (struct store_batch){.id = sqlite3_column_int64(row, 0),
                                  .name = db_text(row, 1, arena),
                                  .source = db_text(row, 2, arena),
                                  .state = (enum store_batch_state)sqlite3_column_int(row, 3),
                                  .begun_ms = sqlite3_column_int64(row, 4),
                                  .finished_ms = sqlite3_column_int64(row, 5),
                                  .files_loaded = sqlite3_column_int64(row, 6),
                                  .files_repeated = sqlite3_column_int64(row, 7),
                                  .files_refused = sqlite3_column_int64(row, 8),
                                  .stars = sqlite3_column_int64(row, 9),
                                  .segments = sqlite3_column_int64(row, 10),
                                  .points = sqlite3_column_int64(row, 11)};
    return batch->name != NULL && batch->source != NULL;
}

bool store_batches_list(struct store *store, struct base_arena *arena, struct store_batch **out,
                        size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_batch, out, count, error,
                   "SELECT id, name, source, state, begun_ms, finished_ms, files_loaded,"
                   " files_repeated, files_refused, stars, segments, points"
                   " FROM batch ORDER BY id",
                   "");
}
