#include <stdio.h>

#include "db.h"

#define SEGMENT                                                                                    \
    "SELECT g.id, g.light_curve, l.star, l.batch, g.public_id, l.time_reference, g.first,"         \
    " g.count, g.starts, g.ends, g.looks, g.settled = 0 AND b.state = 2 FROM segment g"            \
    " JOIN light_curve l ON l.id = g.light_curve JOIN batch b ON b.id = l.batch "

static bool fill_segment(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_segment *segment = item;
    *segment = (struct store_segment){.id = sqlite3_column_int64(row, 0),
                                      .light_curve = sqlite3_column_int64(row, 1),
                                      .star = sqlite3_column_int64(row, 2),
                                      .batch = sqlite3_column_int64(row, 3),
                                      .time_reference = db_text(row, 5, arena),
                                      .first = (size_t)sqlite3_column_int64(row, 6),
                                      .count = (size_t)sqlite3_column_int64(row, 7),
                                      .starts_d = db_real(row, 8),
                                      .ends_d = db_real(row, 9),
                                      .looks = sqlite3_column_int64(row, 10),
                                      .open = sqlite3_column_int(row, 11) != 0};
    (void)snprintf(segment->public_id, sizeof segment->public_id, "%s",
                   (const char *)sqlite3_column_text(row, 4));
    return segment->time_reference != NULL;
}

bool store_segment_by_public_id(struct store *store, struct base_arena *arena,
                                const char *public_id, struct store_segment *out,
                                struct base_error *error)
{
    return db_row(store, arena, fill_segment, out, "There is no such segment.", error,
                  SEGMENT "WHERE g.public_id = ?", "t", public_id);
}

bool store_segment_by_id(struct store *store, struct base_arena *arena, int64_t id,
                         struct store_segment *out, struct base_error *error)
{
    return db_row(store, arena, fill_segment, out, "There is no such segment.", error,
                  SEGMENT "WHERE g.id = ?", "i", id);
}

bool store_segments_open_each(struct store *store,
                              bool (*visit)(void *context, const struct store_open_segment *),
                              void *context, struct base_error *error)
{
    static const char sql[] = "SELECT g.id, l.star, g.looks FROM segment g"
                              " JOIN light_curve l ON l.id = g.light_curve"
                              " JOIN batch b ON b.id = l.batch"
                              " WHERE g.settled = 0 AND b.state = 2 ORDER BY g.id";
    struct db *db = db_read(store);
    sqlite3_stmt *row = db_bind(db, sql, error, "");
    int got = -1;
    while (row != NULL && (got = db_next(db, row, error)) == 1) {
        const struct store_open_segment segment = {
            sqlite3_column_int64(row, 0), sqlite3_column_int64(row, 1), sqlite3_column_int(row, 2)};
        if (!visit(context, &segment)) {
            got = 0;
            break;
        }
    }
    db_done(row);
    db_read_end(store, db);
    return got == 0;
}

static bool fill_id(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    (void)arena;
    *(int64_t *)item = sqlite3_column_int64(row, 0);
    return true;
}

bool store_person_segments(struct store *store, struct base_arena *arena, int64_t person,
                           int64_t **out, size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_id, out, count, error,
                   "SELECT DISTINCT segment FROM review WHERE person = ? ORDER BY segment", "i",
                   person);
}

bool store_segments_settle(struct store *store, const int64_t *segments, size_t count, bool settled,
                           struct base_error *error)
{
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    bool ok = true;
    for (size_t i = 0; ok && i < count; i++)
        ok = db_run(db, error, "UPDATE segment SET settled = ? WHERE id = ?", "ii",
                    (int64_t)settled, segments[i]);
    return db_write_end(store, ok, error);
}

bool store_reviewed_stars(struct store *store, struct base_arena *arena, int64_t newest,
                          int64_t **out, size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_id, out, count, error,
                   "SELECT DISTINCT l.star FROM review r JOIN segment g ON g.id = r.segment"
                   " JOIN light_curve l ON l.id = g.light_curve WHERE r.id <= ? ORDER BY l.star",
                   "i", newest);
}

bool store_reviewing_people(struct store *store, struct base_arena *arena, int64_t newest,
                            int64_t **out, size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_id, out, count, error,
                   "SELECT DISTINCT person FROM review WHERE id <= ? ORDER BY person", "i", newest);
}
