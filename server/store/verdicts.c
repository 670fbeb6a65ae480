#include "db.h"

bool store_verdict_add(struct store *store, int64_t candidate, int64_t person, const char *verdict,
                       const char *note, int64_t now_ms, int64_t *id, struct base_error *error)
{
    struct base_error why = {0};
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    bool ok = db_run(db, &why,
                     "INSERT INTO verdict (candidate, person, verdict, note, given_ms)"
                     " VALUES (?, ?, ?, ?, ?)",
                     "iitti", candidate, person, verdict, note, now_ms);
    if (ok)
        *id = sqlite3_last_insert_rowid(db->handle);
    else if (why.kind == BASE_INVALID)
        (void)base_fail_field(error, BASE_INVALID, "verdict",
                              "A verdict is keep, reject or unsure.");
    else if (why.kind == BASE_NOT_FOUND)
        (void)base_fail(error, BASE_NOT_FOUND, "There is no such candidate, or no such person.");
    else if (error != NULL)
        *error = why;
    return db_write_end(store, ok, error);
}

static bool fill_verdict(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_verdict *verdict = item;
    *verdict = (struct store_verdict){.id = sqlite3_column_int64(row, 0),
                                      .candidate = sqlite3_column_int64(row, 1),
                                      .person = sqlite3_column_int64(row, 2),
                                      .given_ms = sqlite3_column_int64(row, 3),
                                      .handle = db_text(row, 4, arena),
                                      .verdict = db_text(row, 5, arena),
                                      .note = db_text(row, 6, arena)};
    return verdict->handle != NULL && verdict->verdict != NULL && verdict->note != NULL;
}

bool store_verdicts_list(struct store *store, struct base_arena *arena, int64_t candidate,
                         struct store_verdict **out, size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_verdict, out, count, error,
                   "SELECT v.id, v.candidate, v.person, v.given_ms, p.handle, v.verdict, v.note"
                   " FROM verdict v JOIN person p ON p.id = v.person WHERE v.candidate = ?"
                   " ORDER BY v.id",
                   "i", candidate);
}
