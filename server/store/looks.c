/* Reviews as the consensus reads them: by star, up to a stated one. */
#include "rows.h"

bool store_reviewed_stars(struct store *store, struct base_arena *arena, int64_t newest,
                          int64_t **out, size_t *count, struct base_error *error)
{
    /* By star rather than by review, since there are far more reviews. */
    return db_rows(store, arena, sizeof **out, rows_fill_id, out, count, error,
                   "SELECT s.id FROM star s WHERE EXISTS (SELECT 1 FROM light_curve l"
                   " CROSS JOIN segment g ON g.light_curve = l.id"
                   " CROSS JOIN review r ON r.segment = g.id"
                   " WHERE l.star = s.id AND g.looks > 0 AND r.id <= ?) ORDER BY s.id",
                   "i", newest);
}

bool store_reviewing_people(struct store *store, struct base_arena *arena, int64_t newest,
                            int64_t **out, size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, rows_fill_id, out, count, error,
                   "SELECT p.id FROM person p WHERE EXISTS (SELECT 1 FROM review r"
                   " WHERE r.person = p.id AND r.id <= ?) ORDER BY p.id",
                   "i", newest);
}

static bool fill_look(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    (void)arena;
    *(struct store_look *)item =
        (struct store_look){.review = sqlite3_column_int64(row, 0),
                            .person = sqlite3_column_int64(row, 1),
                            .segment = sqlite3_column_int64(row, 2),
                            .light_curve = sqlite3_column_int64(row, 3),
                            .starts_d = sqlite3_column_double(row, 4),
                            .ends_d = sqlite3_column_double(row, 5),
                            .conditions = (unsigned)sqlite3_column_int(row, 6),
                            .seconds = sqlite3_column_double(row, 7),
                            .submitted_ms = sqlite3_column_int64(row, 8)};
    return true;
}

bool store_star_looks(struct store *store, struct base_arena *arena, int64_t star, int64_t newest,
                      struct store_look **looks, size_t *look_count, struct store_mark **marks,
                      size_t *mark_count, struct base_error *error)
{
    static const char look_sql[] =
        "SELECT r.id, r.person, r.segment, g.light_curve, g.starts, g.ends, r.conditions,"
        " r.seconds, r.submitted_ms FROM light_curve l"
        " CROSS JOIN segment g ON g.light_curve = l.id CROSS JOIN review r ON r.segment = g.id"
        " WHERE l.star = ? AND r.id <= ? ORDER BY r.id";
    static const char mark_sql[] =
        "SELECT m.id, m.review, m.starts, m.ends, m.low, m.high, m.sure FROM light_curve l"
        " CROSS JOIN segment g ON g.light_curve = l.id CROSS JOIN review r ON r.segment = g.id"
        " CROSS JOIN mark m ON m.review = r.id WHERE l.star = ? AND r.id <= ? ORDER BY m.id";
    return db_rows(store, arena, sizeof **looks, fill_look, looks, look_count, error, look_sql,
                   "ii", star, newest) &&
           db_rows(store, arena, sizeof **marks, rows_fill_mark, marks, mark_count, error, mark_sql,
                   "ii", star, newest);
}
