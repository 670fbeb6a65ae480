/* Taking reviews: the hot path. One transaction for as many as are waiting. */
#include <string.h>

#include "db.h"

/* A review stored before under this person and key? 1 with the outcome filled in, 0 no, -1. */
static int find_repeated(struct db *db, struct store_review_new *review, struct base_error *error)
{
    static const char sql[] = "SELECT id, body_hash, late FROM review WHERE person = ? AND key = ?";
    sqlite3_stmt *row = db_bind(db, sql, error, "it", review->person, review->key);
    int got = row != NULL ? db_next(db, row, error) : -1;
    unsigned char hash[STORE_HASH_SIZE];
    if (got == 1 && !db_blob(db, row, 1, hash, sizeof hash, error))
        got = -1;
    if (got == 1) {
        bool same = memcmp(hash, review->body_hash, sizeof hash) == 0;
        review->outcome = same ? STORE_REVIEW_REPEATED : STORE_REVIEW_KEY_REUSED;
        review->review = same ? sqlite3_column_int64(row, 0) : 0;
        review->was_late = sqlite3_column_int(row, 2) != 0;
    }
    db_done(row);
    return got;
}

/* 1 open, 0 not (or no such segment), -1 failure. */
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

/* Insert, and only where that clashes look up with what. */
static bool insert_review(struct db *db, struct store_review_new *review, struct base_error *error)
{
    static const char insert[] =
        "INSERT INTO review (person, segment, key, body_hash, lease, late, submitted_ms, seconds,"
        " conditions) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?) ON CONFLICT DO NOTHING";
    static const char looks[] = "UPDATE segment SET looks = looks + 1 WHERE id = ?";
    if (!db_run(db, error, insert, "iitbbiiri", review->person, review->segment, review->key,
                review->body_hash, (size_t)STORE_HASH_SIZE, review->lease, sizeof review->lease,
                (int64_t)review->late, review->submitted_ms, review->seconds,
                (int64_t)review->conditions))
        return false;
    if (sqlite3_changes(db->handle) == 0) {
        review->outcome = STORE_REVIEW_LEASE_USED;
        return find_repeated(db, review, error) >= 0;
    }
    review->review = sqlite3_last_insert_rowid(db->handle);
    review->was_late = review->late;
    review->outcome = STORE_REVIEW_TAKEN;
    return insert_marks(db, review, error) && db_run(db, error, looks, "i", review->segment);
}

static bool take(struct db *db, struct store_review_new *review, struct base_error *error)
{
    review->review = 0;
    review->was_late = false;
    if (review->late) {
        /* A late one sent again gets its first answer, even where the segment has closed since. */
        int found = find_repeated(db, review, error);
        if (found != 0)
            return found == 1;
        int open = segment_is_open(db, review->segment, error);
        if (open <= 0) {
            review->outcome = STORE_REVIEW_CLOSED;
            return open == 0;
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
    ok = db_write_end(store, ok, error);
    for (size_t i = 0; !ok && i < count; i++) {
        reviews[i]->outcome = 0;
        reviews[i]->review = 0;
    }
    return ok;
}

bool store_reviews_high_water(struct store *store, int64_t *newest, int64_t *count,
                              struct base_error *error)
{
    *newest = *count = 0;
    struct db *db = db_read(store);
    sqlite3_stmt *row = db_bind(db, "SELECT ifnull(max(id), 0) FROM review", error, "");
    int got = row != NULL ? db_next(db, row, error) : -1;
    if (got == 1)
        *newest = *count = sqlite3_column_int64(row, 0); /* their ids have no holes */
    db_done(row);
    db_read_end(store, db);
    return got == 1;
}

/* Fill from a row of store_reviews_each; false: a text is missing, so there is no memory. */
static bool fill_row(sqlite3_stmt *at, struct store_mark *mark, struct store_review_row *row)
{
    *mark = (struct store_mark){.id = sqlite3_column_int64(at, 11),
                                .review = sqlite3_column_int64(at, 0),
                                .starts_d = sqlite3_column_double(at, 12),
                                .ends_d = sqlite3_column_double(at, 13),
                                .low = sqlite3_column_double(at, 14),
                                .high = sqlite3_column_double(at, 15),
                                .sure = sqlite3_column_int(at, 16) != 0};
    *row =
        (struct store_review_row){.review = sqlite3_column_int64(at, 0),
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
                                  .mark = sqlite3_column_type(at, 11) == SQLITE_NULL ? NULL : mark};
    return row->handle != NULL && row->star != NULL && row->segment != NULL &&
           row->time_reference != NULL;
}

bool store_reviews_each(struct store *store, int64_t newest,
                        bool (*visit)(void *context, const struct store_review_row *row),
                        void *context, struct base_error *error)
{
    /* CROSS JOIN keeps the reviews outermost, so that they come in order without being sorted. */
    static const char sql[] =
        "SELECT r.id, r.person, p.handle, s.name, g.public_id, g.starts, g.ends, l.time_reference,"
        " r.submitted_ms, r.conditions, r.seconds, m.id, m.starts, m.ends, m.low, m.high, m.sure"
        " FROM review r CROSS JOIN person p ON p.id = r.person"
        " CROSS JOIN segment g ON g.id = r.segment CROSS JOIN light_curve l ON l.id = g.light_curve"
        " CROSS JOIN star s ON s.id = l.star LEFT JOIN mark m ON m.review = r.id"
        " WHERE r.id <= ? ORDER BY r.id, m.id";
    struct db *db = db_read(store);
    sqlite3_stmt *at = db_bind(db, sql, error, "i", newest);
    int got = at != NULL ? 1 : -1;
    while (got == 1 && (got = db_next(db, at, error)) == 1) {
        struct store_mark mark;
        struct store_review_row row;
        if (!fill_row(at, &mark, &row)) {
            (void)db_no_memory(error);
            got = -1;
        } else if (!visit(context, &row)) {
            got = 0;
        }
    }
    db_done(at);
    db_read_end(store, db);
    return got == 0;
}
