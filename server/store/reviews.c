/* Taking reviews: the hot path. One transaction for as many as are waiting. */
#include <string.h>

#include "db.h"

/* A review stored before under this person and key? Fills in the outcome. */
static int find_repeated(struct db *db, struct store_review_new *review, struct base_error *error)
{
    static const char sql[] = "SELECT id, body_hash, late FROM review WHERE person = ? AND key = ?";
    sqlite3_stmt *row = db_bind(db, sql, error, "it", review->person, review->key);
    int got = row != NULL ? db_next(db, row, error) : -1;
    if (got == 1) {
        bool same = memcmp(sqlite3_column_blob(row, 1), review->body_hash, STORE_HASH_SIZE) == 0;
        review->outcome = same ? STORE_REVIEW_REPEATED : STORE_REVIEW_KEY_REUSED;
        review->review = same ? sqlite3_column_int64(row, 0) : 0;
        review->was_late = sqlite3_column_int(row, 2) != 0;
    }
    db_done(row);
    return got;
}

static int segment_is_open(struct db *db, int64_t segment, struct base_error *error)
{
    static const char sql[] = "SELECT g.settled = 0 AND b.state = 2 FROM segment g"
                              " JOIN light_curve l ON l.id = g.light_curve"
                              " JOIN batch b ON b.id = l.batch WHERE g.id = ?";
    sqlite3_stmt *row = db_bind(db, sql, error, "i", segment);
    int got = row != NULL ? db_next(db, row, error) : -1;
    int open = got == 1 ? sqlite3_column_int(row, 0) : got;
    db_done(row);
    return open;
}

static bool insert_marks(struct db *db, const struct store_review_new *review,
                         struct base_error *error)
{
    static const char sql[] = "INSERT INTO mark (review, starts, ends, low, high, sure)"
                              " VALUES (?, ?, ?, ?, ?, ?)";
    bool ok = true;
    for (size_t i = 0; ok && i < review->mark_count; i++) {
        const struct store_mark *mark = &review->marks[i];
        ok = db_run(db, error, sql, "irrrri", review->review, mark->starts_d, mark->ends_d,
                    mark->low, mark->high, (int64_t)mark->sure);
    }
    return ok;
}

static bool insert_review(struct db *db, struct store_review_new *review, struct base_error *error)
{
    static const char insert[] =
        "INSERT INTO review (person, segment, key, body_hash, lease, late, submitted_ms, seconds,"
        " conditions) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?) ON CONFLICT (lease) DO NOTHING";
    static const char looks[] = "UPDATE segment SET looks = looks + 1 WHERE id = ?";
    static const char star[] =
        "UPDATE star SET reviews = reviews + 1 WHERE id = (SELECT l.star FROM segment g"
        " JOIN light_curve l ON l.id = g.light_curve WHERE g.id = ?)";
    if (!db_run(db, error, insert, "iitbbiiri", review->person, review->segment, review->key,
                review->body_hash, (size_t)STORE_HASH_SIZE, review->lease, sizeof review->lease,
                (int64_t)review->late, review->submitted_ms, review->seconds,
                (int64_t)review->conditions))
        return false;
    if (sqlite3_changes(db->handle) == 0) {
        review->outcome = STORE_REVIEW_LEASE_USED;
        return true;
    }
    review->review = sqlite3_last_insert_rowid(db->handle);
    review->was_late = review->late;
    review->outcome = STORE_REVIEW_TAKEN;
    return insert_marks(db, review, error) && db_run(db, error, looks, "i", review->segment) &&
           db_run(db, error, star, "i", review->segment);
}

static bool take(struct db *db, struct store_review_new *review, struct base_error *error)
{
    int found = find_repeated(db, review, error);
    if (found != 0)
        return found == 1;
    if (review->late) {
        int open = segment_is_open(db, review->segment, error);
        if (open < 0)
            return false;
        if (open == 0) {
            review->outcome = STORE_REVIEW_CLOSED;
            return true;
        }
    }
    return insert_review(db, review, error);
}

bool store_reviews_add(struct store *store, struct store_review_new *const *reviews, size_t count,
                       struct base_error *error)
{
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    bool ok = true;
    for (size_t i = 0; ok && i < count; i++)
        ok = take(db, reviews[i], error);
    return db_write_end(store, ok, error);
}

bool store_reviews_high_water(struct store *store, int64_t *newest, int64_t *count,
                              struct base_error *error)
{
    struct db *db = db_read(store);
    sqlite3_stmt *row = db_bind(db, "SELECT ifnull(max(id), 0), count(*) FROM review", error, "");
    int got = row != NULL ? db_next(db, row, error) : -1;
    if (got == 1) {
        *newest = sqlite3_column_int64(row, 0);
        *count = sqlite3_column_int64(row, 1);
    }
    db_done(row);
    db_read_end(store, db);
    return got == 1;
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

static bool fill_mark(sqlite3_stmt *row, struct base_arena *arena, void *item)
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

bool store_star_looks(struct store *store, struct base_arena *arena, int64_t star, int64_t newest,
                      struct store_look **looks, size_t *look_count, struct store_mark **marks,
                      size_t *mark_count, struct base_error *error)
{
    static const char look_sql[] =
        "SELECT r.id, r.person, r.segment, g.light_curve, g.starts, g.ends, r.conditions, "
        "r.seconds,"
        " r.submitted_ms FROM light_curve l JOIN segment g ON g.light_curve = l.id"
        " JOIN review r ON r.segment = g.id WHERE l.star = ? AND r.id <= ? ORDER BY r.id";
    static const char mark_sql[] =
        "SELECT m.id, m.review, m.starts, m.ends, m.low, m.high, m.sure FROM light_curve l"
        " JOIN segment g ON g.light_curve = l.id JOIN review r ON r.segment = g.id"
        " JOIN mark m ON m.review = r.id WHERE l.star = ? AND r.id <= ? ORDER BY m.id";
    return db_rows(store, arena, sizeof **looks, fill_look, looks, look_count, error, look_sql,
                   "ii", star, newest) &&
           db_rows(store, arena, sizeof **marks, fill_mark, marks, mark_count, error, mark_sql,
                   "ii", star, newest);
}

bool store_reviews_each(struct store *store, int64_t newest,
                        bool (*visit)(void *context, const struct store_review_row *row),
                        void *context, struct base_error *error)
{
    static const char sql[] =
        "SELECT r.id, r.person, p.handle, s.name, g.public_id, g.starts, g.ends, l.time_reference,"
        " r.submitted_ms, r.conditions, r.seconds, m.id, m.starts, m.ends, m.low, m.high, m.sure"
        " FROM review r JOIN person p ON p.id = r.person JOIN segment g ON g.id = r.segment"
        " JOIN light_curve l ON l.id = g.light_curve JOIN star s ON s.id = l.star"
        " LEFT JOIN mark m ON m.review = r.id WHERE r.id <= ? ORDER BY r.id, m.id";
    struct db *db = db_read(store);
    sqlite3_stmt *at = db_bind(db, sql, error, "i", newest);
    int got = -1;
    while (at != NULL && (got = db_next(db, at, error)) == 1) {
        const struct store_mark mark = {.id = sqlite3_column_int64(at, 11),
                                        .review = sqlite3_column_int64(at, 0),
                                        .starts_d = sqlite3_column_double(at, 12),
                                        .ends_d = sqlite3_column_double(at, 13),
                                        .low = sqlite3_column_double(at, 14),
                                        .high = sqlite3_column_double(at, 15),
                                        .sure = sqlite3_column_int(at, 16) != 0};
        const struct store_review_row row = {
            .review = sqlite3_column_int64(at, 0),
            .person = sqlite3_column_int64(at, 1),
            .handle = (const char *)sqlite3_column_text(at, 2),
            .star = (const char *)sqlite3_column_text(at, 3),
            .segment = (const char *)sqlite3_column_text(at, 4),
            .segment_starts_d = sqlite3_column_double(at, 5),
            .segment_ends_d = sqlite3_column_double(at, 6),
            .time_reference = (const char *)sqlite3_column_text(at, 7),
            .submitted_ms = sqlite3_column_int64(at, 8),
            .conditions = (unsigned)sqlite3_column_int(at, 9),
            .seconds = sqlite3_column_double(at, 10),
            .mark = sqlite3_column_type(at, 11) == SQLITE_NULL ? NULL : &mark};
        if (!visit(context, &row)) {
            got = 0;
            break;
        }
    }
    db_done(at);
    db_read_end(store, db);
    return got == 0;
}

/* ---- one person's own record ---- */

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
    const unsigned char *id = sqlite3_column_text(row, 1);
    if (id != NULL)
        memcpy(own->segment, id, sizeof own->segment);
    return own->time_reference != NULL;
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
        "SELECT count(*), (SELECT count(*) FROM mark m JOIN review q ON q.id = m.review"
        " WHERE q.person = ?1), ifnull(min(r.submitted_ms), 0), ifnull(max(r.submitted_ms), 0),"
        " ifnull(sum(g.ends - g.starts), 0.0) FROM review r JOIN segment g ON g.id = r.segment"
        " WHERE r.person = ?1";
    static const char reviews_sql[] =
        "SELECT r.id, g.public_id, r.submitted_ms, g.starts, g.ends, l.time_reference, "
        "r.conditions,"
        " r.late FROM review r JOIN segment g ON g.id = r.segment"
        " JOIN light_curve l ON l.id = g.light_curve"
        " WHERE r.person = ?1 AND (?2 = 0 OR r.id < ?2) ORDER BY r.id DESC LIMIT ?3";
    static const char marks_sql[] = "SELECT id, review, starts, ends, low, high, sure FROM mark"
                                    " WHERE review = ? ORDER BY id";
    bool ok = db_row(store, arena, fill_totals, totals, "There is no such person.", error,
                     totals_sql, "i", person) &&
              db_rows(store, arena, sizeof **out, fill_own, out, count, error, reviews_sql, "iii",
                      person, before, (int64_t)limit);
    for (size_t i = 0; ok && i < *count; i++) {
        struct store_mark *marks = NULL;
        ok = db_rows(store, arena, sizeof *marks, fill_mark, &marks, &(*out)[i].mark_count, error,
                     marks_sql, "i", (*out)[i].review);
        (*out)[i].marks = marks;
    }
    return ok;
}
