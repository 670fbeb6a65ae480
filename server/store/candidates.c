#include <assert.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

#include "db.h"

#define COLUMNS                                                                                    \
    "SELECT c.id, c.run, c.star, c.light_curve, s.name, l.time_reference, b.name, s.ra_deg,"       \
    " s.dec_deg, c.starts, c.ends, c.mid, c.mid_error, c.probability, c.log_odds,"                 \
    " c.marks_only_probability, c.term_looks, c.term_time, c.term_snr, c.term_prior, c.looks,"     \
    " c.marks, c.snr, c.depth_ppm, c.depth_error_ppm, c.duration_h, c.duration_error_h,"           \
    " c.ingress_fraction, c.covered, c.gap_distance, c.asymmetry, c.spread_starts,"                \
    " c.spread_ends, c.period, c.period_error, c.epoch, c.transits, c.other_stars, c.flags,"       \
    " ifnull((SELECT v.verdict FROM verdict v WHERE v.candidate = c.id ORDER BY v.id DESC"         \
    " LIMIT 1), '') AS latest "
#define FROM                                                                                       \
    "FROM candidate c JOIN star s ON s.id = c.star JOIN light_curve l ON l.id = c.light_curve"     \
    " JOIN batch b ON b.id = l.batch "

static bool fill_candidate(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_candidate *c = item;
    *c = (struct store_candidate){.id = sqlite3_column_int64(row, 0),
                                  .run = sqlite3_column_int64(row, 1),
                                  .star = sqlite3_column_int64(row, 2),
                                  .light_curve = sqlite3_column_int64(row, 3),
                                  .star_name = db_text(row, 4, arena),
                                  .time_reference = db_text(row, 5, arena),
                                  .batch_name = db_text(row, 6, arena),
                                  .ra_deg = db_real(row, 7),
                                  .dec_deg = db_real(row, 8),
                                  .starts_d = db_real(row, 9),
                                  .ends_d = db_real(row, 10),
                                  .mid_d = db_real(row, 11),
                                  .mid_error_d = db_real(row, 12),
                                  .probability = db_real(row, 13),
                                  .log_odds = db_real(row, 14),
                                  .marks_only_probability = db_real(row, 15),
                                  .term_looks = db_real(row, 16),
                                  .term_time = db_real(row, 17),
                                  .term_snr = db_real(row, 18),
                                  .term_prior = db_real(row, 19),
                                  .looks = sqlite3_column_int64(row, 20),
                                  .marks = sqlite3_column_int64(row, 21),
                                  .snr = db_real(row, 22),
                                  .depth_ppm = db_real(row, 23),
                                  .depth_error_ppm = db_real(row, 24),
                                  .duration_h = db_real(row, 25),
                                  .duration_error_h = db_real(row, 26),
                                  .ingress_fraction = db_real(row, 27),
                                  .covered = db_real(row, 28),
                                  .gap_distance_d = db_real(row, 29),
                                  .asymmetry = db_real(row, 30),
                                  .spread_starts_d = db_real(row, 31),
                                  .spread_ends_d = db_real(row, 32),
                                  .period_d = db_real(row, 33),
                                  .period_error_d = db_real(row, 34),
                                  .epoch_d = db_real(row, 35),
                                  .transits = sqlite3_column_int64(row, 36),
                                  .other_stars = sqlite3_column_int64(row, 37),
                                  .flags = (unsigned)sqlite3_column_int64(row, 38),
                                  .verdict = db_text(row, 39, arena)};
    return c->star_name != NULL && c->time_reference != NULL && c->batch_name != NULL &&
           c->verdict != NULL;
}

/* The filters, each off when its value is empty. ?1 run, ?2 least probability, ?3 star, ?4 batch,
 * ?5 verdict. */
#define WHERE                                                                                      \
    "WHERE c.run = ?1 AND c.probability >= ?2 AND (?3 = '' OR s.name = ?3)"                        \
    " AND (?4 = '' OR b.name = ?4) AND (?5 = '' OR iif(?5 = 'none', '', ?5) ="                     \
    " ifnull((SELECT v.verdict FROM verdict v WHERE v.candidate = c.id ORDER BY v.id DESC"         \
    " LIMIT 1), '')) "

/* One constant question an order and direction: a column's name cannot be a bound value. NULLs come
 * last either way. */
#define ORDERED(column)                                                                            \
    {                                                                                              \
        COLUMNS FROM WHERE "ORDER BY " column " DESC NULLS LAST, c.id LIMIT ?6 OFFSET ?7",         \
            COLUMNS FROM WHERE "ORDER BY " column " ASC NULLS LAST, c.id LIMIT ?6 OFFSET ?7"       \
    }
static const char *const ordered[][2] = {[STORE_BY_PROBABILITY] = ORDERED("c.probability"),
                                         [STORE_BY_SNR] = ORDERED("c.snr"),
                                         [STORE_BY_DEPTH] = ORDERED("c.depth_ppm"),
                                         [STORE_BY_DURATION] = ORDERED("c.duration_h"),
                                         [STORE_BY_STAR] = ORDERED("s.name"),
                                         [STORE_BY_TIME] = ORDERED("c.mid"),
                                         [STORE_BY_LOOKS] = ORDERED("c.looks"),
                                         [STORE_BY_MARKS] = ORDERED("c.marks")};

static bool fill_count(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    (void)arena;
    *(int64_t *)item = sqlite3_column_int64(row, 0);
    return true;
}

bool store_candidates_find(struct store *store, struct base_arena *arena,
                           const struct store_candidate_query *query, struct store_candidate **out,
                           size_t *count, int64_t *total, struct base_error *error)
{
    assert((size_t)query->order < sizeof ordered / sizeof ordered[0]);
    int64_t run = query->run;
    *out = NULL;
    *count = 0;
    if (run == 0 && !store_run_current(store, &run, error))
        return false;
    const char *sql = ordered[query->order][query->ascending ? 1 : 0];
    int64_t limit = query->limit > 0 ? (int64_t)query->limit : -1;
    bool ok = db_rows(store, arena, sizeof **out, fill_candidate, out, count, error, sql, "irtttii",
                      run, query->min_probability, query->star, query->batch, query->verdict, limit,
                      query->offset);
    if (ok && total != NULL)
        ok =
            db_row(store, NULL, fill_count, total, "", error, "SELECT count(*) " FROM WHERE,
                   "irttt", run, query->min_probability, query->star, query->batch, query->verdict);
    return ok;
}

bool store_candidate_read(struct store *store, struct base_arena *arena, int64_t run,
                          int64_t candidate, struct store_candidate *out, struct base_error *error)
{
    if (run == 0 && !store_run_current(store, &run, error))
        return false;
    return db_row(store, arena, fill_candidate, out, "This run has no such candidate.", error,
                  COLUMNS FROM "WHERE c.run = ? AND c.id = ?", "ii", run, candidate);
}

static bool fill_candidate_mark(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_candidate_mark *mark = item;
    *mark = (struct store_candidate_mark){.mark = {.id = sqlite3_column_int64(row, 0),
                                                   .review = sqlite3_column_int64(row, 1),
                                                   .starts_d = sqlite3_column_double(row, 2),
                                                   .ends_d = sqlite3_column_double(row, 3),
                                                   .low = sqlite3_column_double(row, 4),
                                                   .high = sqlite3_column_double(row, 5),
                                                   .sure = sqlite3_column_int(row, 6) != 0},
                                          .person = sqlite3_column_int64(row, 7),
                                          .handle = db_text(row, 8, arena),
                                          .weight = isnan(db_real(row, 9)) ? 1.0 : db_real(row, 9)};
    return mark->handle != NULL;
}

bool store_candidate_marks(struct store *store, struct base_arena *arena, int64_t run,
                           int64_t candidate, struct store_candidate_mark **out, size_t *count,
                           struct base_error *error)
{
    if (run == 0 && !store_run_current(store, &run, error))
        return false;
    return db_rows(store, arena, sizeof **out, fill_candidate_mark, out, count, error,
                   "SELECT m.id, m.review, m.starts, m.ends, m.low, m.high, m.sure, r.person,"
                   " p.handle, k.weight FROM member e JOIN mark m ON m.id = e.mark"
                   " JOIN review r ON r.id = m.review JOIN person p ON p.id = r.person"
                   " LEFT JOIN skill k ON k.run = e.run AND k.person = r.person"
                   " WHERE e.run = ? AND e.candidate = ? ORDER BY m.id",
                   "ii", run, candidate);
}

bool store_person_candidates(struct store *store, struct base_arena *arena, int64_t person,
                             size_t limit, struct store_candidate **out, size_t *count,
                             struct base_error *error)
{
    int64_t run = 0;
    return store_run_current(store, &run, error) &&
           db_rows(store, arena, sizeof **out, fill_candidate, out, count, error,
                   COLUMNS FROM
                   "WHERE c.run = ?1 AND c.id IN (SELECT e.candidate FROM review r"
                   " JOIN mark m ON m.review = r.id JOIN member e ON e.mark = m.id AND e.run = ?1"
                   " WHERE r.person = ?2) ORDER BY c.probability DESC, c.id LIMIT ?3",
                   "iii", run, person, (int64_t)limit);
}
