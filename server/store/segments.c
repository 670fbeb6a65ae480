#include <stdio.h>

#include "rows.h"

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
    const char *id = (const char *)sqlite3_column_text(row, 4);
    if (id != NULL)
        (void)snprintf(segment->public_id, sizeof segment->public_id, "%s", id);
    return id != NULL && segment->time_reference != NULL;
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

bool store_segments_of_star(struct store *store, struct base_arena *arena, int64_t star,
                            struct store_segment **out, size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_segment, out, count, error,
                   SEGMENT "WHERE l.star = ? ORDER BY g.id", "i", star);
}

bool store_segments_open_each(struct store *store,
                              bool (*visit)(void *context, const struct store_open_segment *),
                              void *context, struct base_error *error)
{
    /* CROSS JOIN keeps the segments outermost, so that they come in order without being sorted. */
    static const char sql[] = "SELECT g.id, l.star, g.looks FROM segment g"
                              " CROSS JOIN light_curve l ON l.id = g.light_curve"
                              " CROSS JOIN batch b ON b.id = l.batch"
                              " WHERE g.settled = 0 AND b.state = 2 ORDER BY g.id";
    struct db *db = db_read(store);
    sqlite3_stmt *row = db_bind(db, sql, error, "");
    int got = row != NULL ? 1 : -1;
    while (got == 1 && (got = db_next(db, row, error)) == 1) {
        const struct store_open_segment segment = {
            sqlite3_column_int64(row, 0), sqlite3_column_int64(row, 1), sqlite3_column_int(row, 2)};
        if (!visit(context, &segment))
            got = 0;
    }
    db_done(row);
    db_read_end(store, db);
    return got == 0;
}

bool store_person_segments(struct store *store, struct base_arena *arena, int64_t person,
                           int64_t **out, size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, rows_fill_id, out, count, error,
                   "SELECT DISTINCT segment FROM review WHERE person = ? ORDER BY segment", "i",
                   person);
}

/* Settle one or open it again, and keep its batch's count. */
static bool settle(struct db *db, int64_t segment, int64_t settled, struct base_error *error)
{
    static const char segment_sql[] =
        "UPDATE segment SET settled = ?1 WHERE id = ?2 AND settled <> ?1";
    static const char batch_sql[] =
        "UPDATE batch SET settled = settled + iif(?1, 1, -1) WHERE id = (SELECT l.batch FROM"
        " segment g JOIN light_curve l ON l.id = g.light_curve WHERE g.id = ?2)";
    return db_run(db, error, segment_sql, "ii", settled, segment) &&
           (sqlite3_changes(db->handle) == 0 ||
            db_run(db, error, batch_sql, "ii", settled, segment));
}

bool store_segments_settle(struct store *store, const int64_t *segments, size_t count, bool settled,
                           struct base_error *error)
{
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    bool ok = true;
    for (size_t i = 0; ok && i < count; i++)
        ok = settle(db, segments[i], settled, error);
    return db_write_end(store, ok, error);
}
