#include "db.h"

#define PERSON                                                                                     \
    "SELECT id, handle, handle_key, passphrase, role, suspended, credit, gone, joined_ms FROM "    \
    "person "

static bool fill_person(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_person *person = item;
    *person = (struct store_person){
        .id = sqlite3_column_int64(row, 0),
        .handle = db_text(row, 1, arena),
        .handle_key = sqlite3_column_type(row, 2) == SQLITE_NULL ? NULL : db_text(row, 2, arena),
        .passphrase = db_text(row, 3, arena),
        .role = (enum store_role)sqlite3_column_int(row, 4),
        .suspended = sqlite3_column_int(row, 5) != 0,
        .credit = sqlite3_column_int(row, 6) != 0,
        .left = sqlite3_column_int(row, 7) != 0,
        .joined_ms = sqlite3_column_int64(row, 8)};
    bool lacks_key = person->handle_key == NULL && !person->left;
    return person->handle != NULL && person->passphrase != NULL && !lacks_key;
}

bool store_person_add(struct store *store, const char *handle, const char *handle_key,
                      const char *passphrase, enum store_role role, int64_t now_ms, int64_t *id,
                      struct base_error *error)
{
    static const char sql[] = "INSERT INTO person (handle, handle_key, passphrase, role, joined_ms)"
                              " VALUES (?, ?, ?, ?, ?)";
    struct base_error why = {0};
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    bool ok = db_run(db, &why, sql, "tttii", handle, handle_key, passphrase, (int64_t)role, now_ms);
    if (ok)
        *id = sqlite3_last_insert_rowid(db->handle);
    else if (why.kind == BASE_CONFLICT)
        (void)base_fail_field(error, BASE_CONFLICT, "handle",
                              "The handle is taken; choose another.");
    else if (error != NULL)
        *error = why;
    return db_write_end(store, ok, error);
}

bool store_person_by_key(struct store *store, struct base_arena *arena, const char *handle_key,
                         struct store_person *out, struct base_error *error)
{
    return db_row(store, arena, fill_person, out, "There is nobody of that handle.", error,
                  PERSON "WHERE handle_key = ?", "t", handle_key);
}

bool store_person_by_id(struct store *store, struct base_arena *arena, int64_t id,
                        struct store_person *out, struct base_error *error)
{
    return db_row(store, arena, fill_person, out, "There is no such person.", error,
                  PERSON "WHERE id = ?", "i", id);
}

bool store_people_list(struct store *store, struct base_arena *arena, int64_t after, size_t limit,
                       struct store_person **out, size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_person, out, count, error,
                   PERSON "WHERE id > ? ORDER BY id LIMIT ?", "ii", after, (int64_t)limit);
}

static const char nobody[] = "There is no such person, or they have left.";

bool store_person_set_role(struct store *store, int64_t id, enum store_role role,
                           struct base_error *error)
{
    return db_change(store, nobody, error, "UPDATE person SET role = ? WHERE id = ? AND gone = 0",
                     "ii", (int64_t)role, id);
}

bool store_person_set_suspended(struct store *store, int64_t id, bool suspended,
                                struct base_error *error)
{
    return db_change(store, nobody, error,
                     "UPDATE person SET suspended = ? WHERE id = ? AND gone = 0", "ii",
                     (int64_t)suspended, id);
}

bool store_person_set_credit(struct store *store, int64_t id, bool credit, struct base_error *error)
{
    return db_change(store, nobody, error, "UPDATE person SET credit = ? WHERE id = ? AND gone = 0",
                     "ii", (int64_t)credit, id);
}

bool store_person_set_passphrase(struct store *store, int64_t id, const char *passphrase,
                                 struct base_error *error)
{
    return db_change(store, nobody, error,
                     "UPDATE person SET passphrase = ? WHERE id = ? AND gone = 0", "ti", passphrase,
                     id);
}

bool store_person_forget(struct store *store, int64_t id, struct base_error *error)
{
    static const char forget[] =
        "UPDATE person SET handle = '', handle_key = NULL, passphrase = '',"
        " credit = 0, gone = 1 WHERE id = ? AND gone = 0";
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    bool ok = db_run(db, error, forget, "i", id);
    if (ok && sqlite3_changes(db->handle) == 0)
        ok = base_fail(error, BASE_NOT_FOUND, "%s", nobody);
    ok = ok && db_run(db, error, "DELETE FROM access WHERE person = ?", "i", id);
    return db_write_end(store, ok, error);
}
