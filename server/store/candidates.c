#include <assert.h>
#include <math.h>

#include "rows.h"
#include "runs.h"

#define LATEST                                                                                     \
    "ifnull((SELECT v.verdict FROM verdict v WHERE v.candidate = c.id ORDER BY v.id DESC"          \
    " LIMIT 1), '') "
#define COLUMNS                                                                                    \
    "SELECT c.id, c.run, c.star, c.light_curve, s.name, l.time_reference, b.name, s.ra_deg,"       \
    " s.dec_deg, c.starts, c.ends, c.mid, c.mid_error, c.probability, c.log_odds,"                 \
    " c.marks_only_probability, c.term_looks, c.term_time, c.term_snr, c.term_prior, c.looks,"     \
    " c.marks, c.snr, c.depth_ppm, c.depth_error_ppm, c.duration_h, c.duration_error_h,"           \
    " c.ingress_fraction, c.covered, c.gap_distance, c.asymmetry, c.spread_starts,"                \
    " c.spread_ends, c.period, c.period_error, c.epoch, c.transits, c.other_stars, c.flags,"       \
    " " LATEST                                                                                     \
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

/*
 * The list is found in two steps: ids in order, from one index alone where that is possible, then
 * the rows of one page. ?1 run, ?2 least probability, ?3 batch, ?4 verdict, ?5 star, ?6 limit, ?7
 * offset.
 */
#define BY_RUN "FROM candidate c WHERE c.run = ?1 AND "
#define BY_NAME "FROM star s CROSS JOIN candidate c ON c.run = ?1 AND c.star = s.id WHERE "
#define LEAST "c.probability >= ?2 "
/* + keeps the planner from taking the index of probabilities where another is in order already. */
#define LEAST_ASIDE "+c.probability >= ?2 "
/* The first part of each verdict's test is quick and settles most candidates. */
#define ALSO                                                                                       \
    "AND (?3 = 0 OR c.batch = ?3) AND (?4 = ''"                                                    \
    " OR (?4 = 'none' AND c.id NOT IN (SELECT candidate FROM verdict))"                            \
    " OR (c.id IN (SELECT candidate FROM verdict WHERE verdict = ?4) AND " LATEST "= ?4)) "
#define OF_STAR "AND c.star = ?5 "

/* Over all stars, or those of one. */
enum narrowed { BY_NOTHING, BY_STAR, NARROWED_COUNT };

/* Ties stand in the direction of the order, so that an index can be walked either way; what was not
 * measured comes last in both. */
#define DIRECTED(from, column, where)                                                              \
    {                                                                                              \
        "SELECT c.id " from where "ORDER BY " column " DESC NULLS LAST, c.id DESC"                 \
        " LIMIT ?6 OFFSET ?7",                                                                     \
            "SELECT c.id " from where "ORDER BY " column " ASC NULLS LAST, c.id ASC"               \
            " LIMIT ?6 OFFSET ?7"                                                                  \
    }
#define ORDERED(from, column, least)                                                               \
    {                                                                                              \
        DIRECTED(from, column, least ALSO), DIRECTED(from, column, LEAST_ASIDE ALSO OF_STAR)       \
    }
/* A column's name cannot be a bound value, hence one constant question for each. */
static const char *const ordered[][NARROWED_COUNT][2] = {
    [STORE_BY_PROBABILITY] = ORDERED(BY_RUN, "c.probability", LEAST),
    [STORE_BY_SNR] = ORDERED(BY_RUN, "c.snr", LEAST_ASIDE),
    [STORE_BY_DEPTH] = ORDERED(BY_RUN, "c.depth_ppm", LEAST_ASIDE),
    [STORE_BY_DURATION] = ORDERED(BY_RUN, "c.duration_h", LEAST_ASIDE),
    [STORE_BY_STAR] = ORDERED(BY_NAME, "s.name", LEAST_ASIDE),
    [STORE_BY_TIME] = ORDERED(BY_RUN, "c.mid", LEAST_ASIDE),
    [STORE_BY_LOOKS] = ORDERED(BY_RUN, "c.looks", LEAST_ASIDE),
    [STORE_BY_MARKS] = ORDERED(BY_RUN, "c.marks", LEAST_ASIDE)};
static const struct {
    const char *sql, *kinds; /* the values up to the last that the question takes */
} counted[NARROWED_COUNT] = {
    [BY_NOTHING] = {"SELECT count(*) " BY_RUN LEAST ALSO, "irit"},
    [BY_STAR] = {"SELECT count(*) " BY_RUN LEAST_ASIDE ALSO OF_STAR, "iriti"}};

/* The query with names turned into ids. */
struct narrowing {
    enum narrowed by;
    bool empty; /* nothing can match */
    int64_t run, batch, star;
};

/* The id of what bears this name, 0 when nothing does. */
static bool id_of(struct store *store, const char *sql, const char *name, int64_t *id,
                  struct base_error *error)
{
    struct db *db = db_read(store);
    sqlite3_stmt *row = db_bind(db, sql, error, "t", name);
    int got = row != NULL ? db_next(db, row, error) : -1;
    *id = got == 1 ? sqlite3_column_int64(row, 0) : 0;
    db_done(row);
    db_read_end(store, db);
    return got >= 0;
}

static bool narrow(struct store *store, const struct store_candidate_query *query,
                   struct narrowing *out, struct base_error *error)
{
    *out = (struct narrowing){0};
    if (!runs_resolve(store, query->run, &out->run, error) ||
        (query->batch[0] != '\0' &&
         !id_of(store, "SELECT id FROM batch WHERE name = ?", query->batch, &out->batch, error)) ||
        (query->star[0] != '\0' &&
         !id_of(store, "SELECT id FROM star WHERE name = ?", query->star, &out->star, error)))
        return false;
    out->empty = out->run == 0 || (query->batch[0] != '\0' && out->batch == 0) ||
                 (query->star[0] != '\0' && out->star == 0);
    out->by = out->star != 0 ? BY_STAR : BY_NOTHING;
    return true;
}

static bool read_each(struct store *store, struct base_arena *arena, int64_t run,
                      const int64_t *ids, size_t count, struct store_candidate **out,
                      struct base_error *error)
{
    *out = base_arena_take_array(arena, count, sizeof **out);
    if (*out == NULL && count > 0)
        return db_no_memory(error);
    struct db *db = db_read(store);
    bool ok = true;
    for (size_t i = 0; ok && i < count; i++) {
        sqlite3_stmt *row =
            db_bind(db, COLUMNS "WHERE c.run = ? AND c.id = ?", error, "ii", run, ids[i]);
        int got = row != NULL ? db_next(db, row, error) : -1;
        ok = got == 1 && (fill_candidate(row, arena, &(*out)[i]) || db_no_memory(error));
        if (got == 0)
            (void)base_fail(error, BASE_CORRUPT,
                            "A candidate's star, light curve or batch is missing; restore the "
                            "newest backup.");
        db_done(row);
    }
    db_read_end(store, db);
    return ok;
}

bool store_candidates_find(struct store *store, struct base_arena *arena,
                           const struct store_candidate_query *query, struct store_candidate **out,
                           size_t *count, int64_t *total, struct base_error *error)
{
    assert((size_t)query->order < sizeof ordered / sizeof ordered[0]);
    struct narrowing to;
    *out = NULL;
    *count = 0;
    if (total != NULL)
        *total = 0;
    if (!narrow(store, query, &to, error))
        return false;
    if (to.empty)
        return true;
    int64_t *ids = NULL;
    int64_t limit =
        query->limit == 0 || query->limit > INT64_MAX ? INT64_MAX : (int64_t)query->limit;
    bool ok =
        db_rows(store, arena, sizeof *ids, rows_fill_id, &ids, count, error,
                ordered[query->order][to.by][query->ascending ? 1 : 0], "iritiii", to.run,
                query->min_probability, to.batch, query->verdict, to.star, limit, query->offset) &&
        read_each(store, arena, to.run, ids, *count, out, error);
    if (ok && total != NULL)
        ok = db_row(store, NULL, rows_fill_id, total, "", error, counted[to.by].sql,
                    counted[to.by].kinds, to.run, query->min_probability, to.batch, query->verdict,
                    to.star);
    return ok;
}

bool store_candidate_read(struct store *store, struct base_arena *arena, int64_t run,
                          int64_t candidate, struct store_candidate *out, struct base_error *error)
{
    return runs_resolve(store, run, &run, error) &&
           db_row(store, arena, fill_candidate, out, "This run has no such candidate.", error,
                  COLUMNS "WHERE c.run = ? AND c.id = ?", "ii", run, candidate);
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
    if (!runs_resolve(store, run, &run, error))
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
    return runs_resolve(store, 0, &run, error) &&
           db_rows(store, arena, sizeof **out, fill_candidate, out, count, error,
                   COLUMNS
                   "WHERE c.run = ?1 AND c.id IN (SELECT e.candidate FROM review r"
                   " JOIN mark m ON m.review = r.id JOIN member e ON e.mark = m.id AND e.run = ?1"
                   " WHERE r.person = ?2) ORDER BY c.probability DESC, c.id LIMIT ?3",
                   "iii", run, person, (int64_t)limit);
}
