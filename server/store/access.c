#include "db.h"

bool store_access_add(struct store *store, enum store_access kind,
                      const unsigned char hash[STORE_HASH_SIZE], int64_t person,
                      enum store_role role, int64_t now_ms, int64_t ends_ms,
                      struct base_error *error)
{
    return db_change(store, NULL, error,
                     "INSERT INTO access (hash, kind, person, role, made_ms, ends_ms)"
                     " VALUES (?, ?, ?, ?, ?, ?)",
                     "biiiii", hash, (size_t)STORE_HASH_SIZE, (int64_t)kind, person, (int64_t)role,
                     now_ms, ends_ms);
}

static bool fill_found(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    (void)arena;
    *(struct store_access_found *)item =
        (struct store_access_found){.person = sqlite3_column_int64(row, 0),
                                    .role = (enum store_role)sqlite3_column_int(row, 1),
                                    .ends_ms = sqlite3_column_int64(row, 2),
                                    .suspended = sqlite3_column_int(row, 3) != 0};
    return true;
}

bool store_access_find(struct store *store, enum store_access kind,
                       const unsigned char hash[STORE_HASH_SIZE], int64_t now_ms,
                       struct store_access_found *out, struct base_error *error)
{
    /* A session follows the person's role; a token never has more than it was made with. */
    return db_row(
        store, NULL, fill_found, out, "This sign-in has ended.", error,
        "SELECT p.id, iif(a.kind = 1, min(a.role, p.role), p.role), a.ends_ms, p.suspended"
        " FROM access a JOIN person p ON p.id = a.person"
        " WHERE a.hash = ? AND a.kind = ? AND a.ends_ms > ?",
        "bii", hash, (size_t)STORE_HASH_SIZE, (int64_t)kind, now_ms);
}

bool store_access_end(struct store *store, enum store_access kind,
                      const unsigned char hash[STORE_HASH_SIZE], struct base_error *error)
{
    return db_change(store, NULL, error, "DELETE FROM access WHERE hash = ? AND kind = ?", "bi",
                     hash, (size_t)STORE_HASH_SIZE, (int64_t)kind);
}

bool store_access_purge(struct store *store, int64_t now_ms, struct base_error *error)
{
    return db_change(store, NULL, error, "DELETE FROM access WHERE ends_ms <= ?", "i", now_ms);
}
