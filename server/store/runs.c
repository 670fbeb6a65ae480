#include "db.h"

static bool candidate_put(struct db *db, int64_t run, const struct store_candidate *c,
                          struct base_error *error)
{
    static const char sql[] =
        "INSERT INTO candidate (run, id, star, light_curve, starts, ends, mid, mid_error,"
        " probability, log_odds, marks_only_probability, term_looks, term_time, term_snr,"
        " term_prior, looks, marks, snr, depth_ppm, depth_error_ppm, duration_h, duration_error_h,"
        " ingress_fraction, covered, gap_distance, asymmetry, spread_starts, spread_ends, period,"
        " period_error, epoch, transits, other_stars, flags) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?,"
        " ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)";
    return db_run(db, error, sql, "iiiirrrrrrrrrrriirrrrrrrrrrrrrriii", run, c->id, c->star,
                  c->light_curve, c->starts_d, c->ends_d, c->mid_d, c->mid_error_d, c->probability,
                  c->log_odds, c->marks_only_probability, c->term_looks, c->term_time, c->term_snr,
                  c->term_prior, c->looks, c->marks, c->snr, c->depth_ppm, c->depth_error_ppm,
                  c->duration_h, c->duration_error_h, c->ingress_fraction, c->covered,
                  c->gap_distance_d, c->asymmetry, c->spread_starts_d, c->spread_ends_d,
                  c->period_d, c->period_error_d, c->epoch_d, c->transits, c->other_stars,
                  (int64_t)c->flags);
}

static bool run_put(struct db *db, struct store_run_new *new, struct base_error *error)
{
    static const char run_sql[] =
        "INSERT INTO consensus_run (newest_review, reviews, people, candidates, begun_ms,"
        " finished_ms, settings, fit) VALUES (?, ?, ?, ?, ?, ?, ?, ?)";
    static const char member_sql[] = "INSERT INTO member (run, mark, candidate) VALUES (?, ?, ?)";
    static const char skill_sql[] =
        "INSERT INTO skill (run, person, looks, marks, days_looked, hit, hit_low, hit_high, chance,"
        " chance_low, chance_high, weight) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)";
    struct store_run *run = &new->run;
    bool ok = db_run(db, error, run_sql, "iiiiiitt", run->newest_review, run->reviews, run->people,
                     (int64_t) new->candidate_count, run->begun_ms, run->finished_ms, run->settings,
                     run->fit);
    run->id = ok ? sqlite3_last_insert_rowid(db->handle) : 0;
    for (size_t i = 0; ok && i < new->candidate_count; i++)
        ok = candidate_put(db, run->id, &new->candidates[i], error);
    for (size_t i = 0; ok && i < new->member_count; i++)
        ok = db_run(db, error, member_sql, "iii", run->id, new->members[i].mark,
                    new->members[i].candidate);
    for (size_t i = 0; ok && i < new->skill_count; i++) {
        const struct store_skill *s = &new->skills[i];
        ok = db_run(db, error, skill_sql, "iiiirrrrrrrr", run->id, s->person, s->looks, s->marks,
                    s->days_looked, s->hit, s->hit_low, s->hit_high, s->chance, s->chance_low,
                    s->chance_high, s->weight);
    }
    return ok;
}

bool store_run_add(struct store *store, struct store_run_new *run, struct base_error *error)
{
    struct db *db = db_write(store, error);
    return db != NULL && db_write_end(store, run_put(db, run, error), error);
}

bool store_run_current(struct store *store, int64_t *run, struct base_error *error)
{
    struct db *db = db_read(store);
    sqlite3_stmt *row = db_bind(db, "SELECT ifnull(max(id), 0) FROM consensus_run", error, "");
    int got = row != NULL ? db_next(db, row, error) : -1;
    *run = got == 1 ? sqlite3_column_int64(row, 0) : 0;
    db_done(row);
    db_read_end(store, db);
    return got == 1;
}

#define RUN                                                                                        \
    "SELECT id, newest_review, reviews, people, candidates, begun_ms, finished_ms, settings, fit"  \
    " FROM consensus_run "

static bool fill_run(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_run *run = item;
    *run = (struct store_run){.id = sqlite3_column_int64(row, 0),
                              .newest_review = sqlite3_column_int64(row, 1),
                              .reviews = sqlite3_column_int64(row, 2),
                              .people = sqlite3_column_int64(row, 3),
                              .candidates = sqlite3_column_int64(row, 4),
                              .begun_ms = sqlite3_column_int64(row, 5),
                              .finished_ms = sqlite3_column_int64(row, 6),
                              .settings = db_text(row, 7, arena),
                              .fit = db_text(row, 8, arena)};
    return run->settings != NULL && run->fit != NULL;
}

bool store_run_read(struct store *store, struct base_arena *arena, int64_t run,
                    struct store_run *out, struct base_error *error)
{
    return db_row(store, arena, fill_run, out, "There is no such run.", error, RUN "WHERE id = ?",
                  "i", run);
}

bool store_runs_list(struct store *store, struct base_arena *arena, int64_t before, size_t limit,
                     struct store_run **out, size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_run, out, count, error,
                   RUN "WHERE ?1 = 0 OR id < ?1 ORDER BY id DESC LIMIT ?2", "ii", before,
                   (int64_t)limit);
}

#define SKILL                                                                                      \
    "SELECT k.person, p.handle, k.looks, k.marks, k.days_looked, k.hit, k.hit_low, k.hit_high,"    \
    " k.chance, k.chance_low, k.chance_high, k.weight FROM skill k"                                \
    " JOIN person p ON p.id = k.person "

/* Without an arena the handle is left out. */
static bool fill_skill(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_skill *skill = item;
    *skill = (struct store_skill){.person = sqlite3_column_int64(row, 0),
                                  .handle = arena != NULL ? db_text(row, 1, arena) : "",
                                  .looks = sqlite3_column_int64(row, 2),
                                  .marks = sqlite3_column_int64(row, 3),
                                  .days_looked = db_real(row, 4),
                                  .hit = db_real(row, 5),
                                  .hit_low = db_real(row, 6),
                                  .hit_high = db_real(row, 7),
                                  .chance = db_real(row, 8),
                                  .chance_low = db_real(row, 9),
                                  .chance_high = db_real(row, 10),
                                  .weight = db_real(row, 11)};
    return skill->handle != NULL;
}

bool store_skills_list(struct store *store, struct base_arena *arena, int64_t run,
                       struct store_skill **out, size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_skill, out, count, error,
                   SKILL "WHERE k.run = iif(?1 = 0, (SELECT max(id) FROM consensus_run), ?1)"
                         " ORDER BY k.person",
                   "i", run);
}

bool store_skill_read(struct store *store, int64_t person, struct store_skill *out,
                      struct base_error *error)
{
    return db_row(store, NULL, fill_skill, out, "No run knows this person's skill yet.", error,
                  SKILL "WHERE k.run = (SELECT max(id) FROM consensus_run) AND k.person = ?", "i",
                  person);
}
