#include <sodium.h>

#include "db.h"
#include "ebbmark/clock.h"

bool store_secret(struct store *store, const char *name, unsigned char out[STORE_HASH_SIZE],
                  struct base_error *error)
{
    static const char make[] =
        "INSERT INTO secret (name, value) VALUES (?, ?) ON CONFLICT DO NOTHING";
    static const char read[] = "SELECT value FROM secret WHERE name = ?";
    unsigned char fresh[STORE_HASH_SIZE];
    randombytes_buf(fresh, sizeof fresh);
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    bool ok = db_run(db, error, make, "tb", name, fresh, sizeof fresh);
    sqlite3_stmt *row = ok ? db_bind(db, read, error, "t", name) : NULL;
    ok = row != NULL && db_next(db, row, error) == 1 &&
         db_blob(db, row, 0, out, STORE_HASH_SIZE, error);
    db_done(row);
    sodium_memzero(fresh, sizeof fresh);
    return db_write_end(store, ok, error);
}

static bool fill_setting(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_setting *setting = item;
    setting->name = db_text(row, 0, arena);
    setting->value = db_text(row, 1, arena);
    return setting->name != NULL && setting->value != NULL;
}

bool store_settings_read(struct store *store, struct base_arena *arena, struct store_setting **out,
                         size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_setting, out, count, error,
                   "SELECT name, value FROM setting ORDER BY name", "");
}

bool store_setting_write(struct store *store, const char *name, const char *value, int64_t person,
                         struct base_error *error)
{
    static const char write[] = "INSERT INTO setting (name, value) VALUES (?, ?)"
                                " ON CONFLICT (name) DO UPDATE SET value = excluded.value";
    static const char note[] = "INSERT INTO setting_change (name, value, person, changed_ms)"
                               " VALUES (?, ?, ?, ?)";
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    bool ok = db_run(db, error, write, "tt", name, value) &&
              db_run(db, error, note, "ttii", name, value, person, base_clock_unix_ms());
    return db_write_end(store, ok, error);
}
