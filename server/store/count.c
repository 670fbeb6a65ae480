#include "db.h"

static bool fill_counts(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    (void)arena;
    *(struct store_counts *)item =
        (struct store_counts){.stars = sqlite3_column_int64(row, 0),
                              .light_curves = sqlite3_column_int64(row, 1),
                              .segments = sqlite3_column_int64(row, 2),
                              .open_segments = sqlite3_column_int64(row, 3),
                              .reviews = sqlite3_column_int64(row, 4),
                              .marks = sqlite3_column_int64(row, 5),
                              .people = sqlite3_column_int64(row, 6),
                              .runs = sqlite3_column_int64(row, 7)};
    return true;
}

bool store_count(struct store *store, struct store_counts *out, struct base_error *error)
{
    return db_row(store, NULL, fill_counts, out, "", error,
                  "SELECT (SELECT count(*) FROM star), (SELECT count(*) FROM light_curve),"
                  " (SELECT count(*) FROM segment), (SELECT count(*) FROM segment g"
                  " JOIN light_curve l ON l.id = g.light_curve JOIN batch b ON b.id = l.batch"
                  " WHERE g.settled = 0 AND b.state = 2), (SELECT count(*) FROM review),"
                  " (SELECT count(*) FROM mark), (SELECT count(*) FROM person WHERE gone = 0),"
                  " (SELECT count(*) FROM consensus_run)",
                  "");
}
