#include "rows.h"

bool rows_fill_id(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    (void)arena;
    *(int64_t *)item = sqlite3_column_int64(row, 0);
    return true;
}

bool rows_fill_mark(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    (void)arena;
    *(struct store_mark *)item = (struct store_mark){.id = sqlite3_column_int64(row, 0),
                                                     .review = sqlite3_column_int64(row, 1),
                                                     .starts_d = sqlite3_column_double(row, 2),
                                                     .ends_d = sqlite3_column_double(row, 3),
                                                     .low = sqlite3_column_double(row, 4),
                                                     .high = sqlite3_column_double(row, 5),
                                                     .sure = sqlite3_column_int(row, 6) != 0};
    return true;
}
