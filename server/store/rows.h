/* Rows that more than one file reads. */
#ifndef STORE_ROWS_H
#define STORE_ROWS_H

#include "db.h"

/* An int64_t in column 0. */
bool rows_fill_id(sqlite3_stmt *row, struct base_arena *arena, void *item);

/* A struct store_mark from columns id, review, starts, ends, low, high, sure, in this order from
 * column 0 on. */
bool rows_fill_mark(sqlite3_stmt *row, struct base_arena *arena, void *item);

#endif
