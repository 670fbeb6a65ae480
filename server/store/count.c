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
    /* The batches keep counts of what is in them, and ids of reviews and marks have no holes, so
     * that this stays quick however large the campaign is. */
    static const char sql[] =
        "SELECT (SELECT count(*) FROM star), (SELECT ifnull(sum(light_curves), 0) FROM batch),"
        " (SELECT ifnull(sum(segments), 0) FROM batch),"
        " (SELECT ifnull(sum(segments - settled), 0) FROM batch WHERE state = 2),"
        " (SELECT ifnull(max(id), 0) FROM review), (SELECT ifnull(max(id), 0) FROM mark),"
        " (SELECT count(*) FROM person WHERE gone = 0),"
        " (SELECT count(*) FROM consensus_run WHERE whole = 1)";
    return db_row(store, NULL, fill_counts, out, "", error, sql, "");
}
