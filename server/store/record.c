/* One person's own reviews. */
#include <stdio.h>

#include "rows.h"

static bool fill_own(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_own_review *own = item;
    *own = (struct store_own_review){.review = sqlite3_column_int64(row, 0),
                                     .submitted_ms = sqlite3_column_int64(row, 2),
                                     .starts_d = sqlite3_column_double(row, 3),
                                     .ends_d = sqlite3_column_double(row, 4),
                                     .time_reference = db_text(row, 5, arena),
                                     .conditions = (unsigned)sqlite3_column_int(row, 6),
                                     .late = sqlite3_column_int(row, 7) != 0};
    const char *id = (const char *)sqlite3_column_text(row, 1);
    if (id != NULL)
        (void)snprintf(own->segment, sizeof own->segment, "%s", id);
    return id != NULL && own->time_reference != NULL;
}

static bool fill_totals(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    (void)arena;
    *(struct store_own_totals *)item =
        (struct store_own_totals){.looks = sqlite3_column_int64(row, 0),
                                  .marks = sqlite3_column_int64(row, 1),
                                  .first_ms = sqlite3_column_int64(row, 2),
                                  .last_ms = sqlite3_column_int64(row, 3),
                                  .days_looked = sqlite3_column_double(row, 4)};
    return true;
}

bool store_person_record(struct store *store, struct base_arena *arena, int64_t person,
                         int64_t before, size_t limit, struct store_own_totals *totals,
                         struct store_own_review **out, size_t *count, struct base_error *error)
{
    static const char totals_sql[] =
        "SELECT count(*), (SELECT count(*) FROM review q CROSS JOIN mark m ON m.review = q.id"
        " WHERE q.person = ?1), ifnull(min(r.submitted_ms), 0), ifnull(max(r.submitted_ms), 0),"
        " ifnull(sum(g.ends - g.starts), 0.0) FROM review r CROSS JOIN segment g"
        " ON g.id = r.segment WHERE r.person = ?1";
    /* The ids come first, from the index of a person's keys alone; + keeps the planner from
     * walking all reviews backwards instead. */
    static const char reviews_sql[] =
        "SELECT r.id, g.public_id, r.submitted_ms, g.starts, g.ends, l.time_reference,"
        " r.conditions, r.late FROM review r CROSS JOIN segment g ON g.id = r.segment"
        " CROSS JOIN light_curve l ON l.id = g.light_curve"
        " WHERE r.id IN (SELECT id FROM review WHERE person = ?1 AND (?2 = 0 OR id < ?2)"
        " ORDER BY +id DESC LIMIT ?3) ORDER BY r.id DESC";
    static const char marks_sql[] = "SELECT id, review, starts, ends, low, high, sure FROM mark"
                                    " WHERE review = ? ORDER BY id";
    bool ok = db_row(store, arena, fill_totals, totals, "There is no such person.", error,
                     totals_sql, "i", person) &&
              db_rows(store, arena, sizeof **out, fill_own, out, count, error, reviews_sql, "iii",
                      person, before, (int64_t)limit);
    for (size_t i = 0; ok && i < *count; i++) {
        struct store_mark *marks = NULL;
        ok = db_rows(store, arena, sizeof *marks, rows_fill_mark, &marks, &(*out)[i].mark_count,
                     error, marks_sql, "i", (*out)[i].review);
        (*out)[i].marks = marks;
    }
    return ok;
}
