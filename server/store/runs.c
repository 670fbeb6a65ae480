/*
 * Consensus runs. A large one takes seconds to write, so it is written in pieces, between which
 * others may write; it counts once its last piece has marked it as whole.
 */
#include "runs.h"

#define PIECE_CANDIDATES 1000u
#define PIECE_MEMBERS 5000u
#define PIECE_SKILLS 5000u

static bool put_candidate(struct db *db, int64_t run, const struct store_candidate *c,
                          struct base_error *error)
{
    static const char sql[] =
        "INSERT INTO candidate (run, id, star, light_curve, batch, starts, ends, mid, mid_error,"
        " probability, log_odds, marks_only_probability, term_looks, term_time, term_snr,"
        " term_prior, looks, marks, snr, depth_ppm, depth_error_ppm, duration_h, duration_error_h,"
        " ingress_fraction, covered, gap_distance, asymmetry, spread_starts, spread_ends, period,"
        " period_error, epoch, transits, other_stars, flags) VALUES (?1, ?2, ?3, ?4,"
        " (SELECT batch FROM light_curve WHERE id = ?4), ?5, ?6, ?7, ?8, ?9, ?10, ?11, ?12, ?13,"
        " ?14, ?15, ?16, ?17, ?18, ?19, ?20, ?21, ?22, ?23, ?24, ?25, ?26, ?27, ?28, ?29, ?30,"
        " ?31, ?32, ?33, ?34)";
    return db_run(db, error, sql, "iiiirrrrrrrrrrriirrrrrrrrrrrrrriii", run, c->id, c->star,
                  c->light_curve, c->starts_d, c->ends_d, c->mid_d, c->mid_error_d, c->probability,
                  c->log_odds, c->marks_only_probability, c->term_looks, c->term_time, c->term_snr,
                  c->term_prior, c->looks, c->marks, c->snr, c->depth_ppm, c->depth_error_ppm,
                  c->duration_h, c->duration_error_h, c->ingress_fraction, c->covered,
                  c->gap_distance_d, c->asymmetry, c->spread_starts_d, c->spread_ends_d,
                  c->period_d, c->period_error_d, c->epoch_d, c->transits, c->other_stars,
                  (int64_t)c->flags);
}

static bool put_member(struct db *db, int64_t run, const struct store_member *member,
                       struct base_error *error)
{
    return db_run(db, error, "INSERT INTO member (run, mark, candidate) VALUES (?, ?, ?)", "iii",
                  run, member->mark, member->candidate);
}

static bool put_skill(struct db *db, int64_t run, const struct store_skill *s,
                      struct base_error *error)
{
    static const char sql[] =
        "INSERT INTO skill (run, person, looks, marks, days_looked, hit, hit_low, hit_high, chance,"
        " chance_low, chance_high, weight) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)";
    return db_run(db, error, sql, "iiiirrrrrrrr", run, s->person, s->looks, s->marks,
                  s->days_looked, s->hit, s->hit_low, s->hit_high, s->chance, s->chance_low,
                  s->chance_high, s->weight);
}

/* One piece of the candidates, the members or the skills: items `first` and on. */
enum part { CANDIDATES, MEMBERS, SKILLS };
static bool put_piece(struct db *db, const struct store_run_new *new, enum part part, size_t first,
                      size_t count, struct base_error *error)
{
    bool ok = true;
    for (size_t i = first; ok && i < first + count; i++) {
        if (part == CANDIDATES)
            ok = put_candidate(db, new->run.id, &new->candidates[i], error);
        else if (part == MEMBERS)
            ok = put_member(db, new->run.id, &new->members[i], error);
        else
            ok = put_skill(db, new->run.id, &new->skills[i], error);
    }
    return ok;
}

static bool put_part(struct store *store, const struct store_run_new *new, enum part part,
                     size_t count, size_t piece, struct base_error *error)
{
    bool ok = true;
    for (size_t first = 0; ok && first < count; first += piece) {
        size_t some = count - first < piece ? count - first : piece;
        struct db *db = db_write(store, error);
        ok = db != NULL && db_write_end(store, put_piece(db, new, part, first, some, error), error);
    }
    return ok;
}

/* Remove what a run that was never finished has left. */
static bool clear_unfinished(struct db *db, struct base_error *error)
{
#define UNFINISHED "(SELECT id FROM consensus_run WHERE whole = 0)"
    return db_run(db, error, "DELETE FROM member WHERE run IN " UNFINISHED, "") &&
           db_run(db, error, "DELETE FROM candidate WHERE run IN " UNFINISHED, "") &&
           db_run(db, error, "DELETE FROM skill WHERE run IN " UNFINISHED, "") &&
           db_run(db, error, "DELETE FROM consensus_run WHERE whole = 0", "");
#undef UNFINISHED
}

static bool begin_run(struct store *store, struct store_run_new *new, struct base_error *error)
{
    static const char sql[] =
        "INSERT INTO consensus_run (newest_review, reviews, people, candidates, begun_ms,"
        " finished_ms, settings, fit) VALUES (?, ?, ?, ?, ?, ?, ?, ?)";
    struct store_run *run = &new->run;
    struct db *db = db_write(store, error);
    if (db == NULL)
        return false;
    bool ok = clear_unfinished(db, error) &&
              db_run(db, error, sql, "iiiiiitt", run->newest_review, run->reviews, run->people,
                     (int64_t) new->candidate_count, run->begun_ms, run->finished_ms, run->settings,
                     run->fit);
    run->id = ok ? sqlite3_last_insert_rowid(db->handle) : 0;
    return db_write_end(store, ok, error);
}

bool store_run_add(struct store *store, struct store_run_new *run, struct base_error *error)
{
    (void)pthread_mutex_lock(&store->adding);
    bool ok = begin_run(store, run, error) &&
              put_part(store, run, CANDIDATES, run->candidate_count, PIECE_CANDIDATES, error) &&
              put_part(store, run, MEMBERS, run->member_count, PIECE_MEMBERS, error) &&
              put_part(store, run, SKILLS, run->skill_count, PIECE_SKILLS, error) &&
              db_change(store, NULL, error, "UPDATE consensus_run SET whole = 1 WHERE id = ?", "i",
                        run->run.id);
    if (!ok)
        run->run.id = 0; /* its pieces are cleared by the next run, when there is room again */
    (void)pthread_mutex_unlock(&store->adding);
    return ok;
}

bool runs_resolve(struct store *store, int64_t asked, int64_t *run, struct base_error *error)
{
    static const char sql[] = "SELECT id FROM consensus_run WHERE whole = 1 AND (?1 = 0 OR id = ?1)"
                              " ORDER BY id DESC LIMIT 1";
    struct db *db = db_read(store);
    sqlite3_stmt *row = db_bind(db, sql, error, "i", asked);
    int got = row != NULL ? db_next(db, row, error) : -1;
    *run = got == 1 ? sqlite3_column_int64(row, 0) : 0;
    db_done(row);
    db_read_end(store, db);
    return got >= 0;
}

bool store_run_current(struct store *store, int64_t *run, struct base_error *error)
{
    return runs_resolve(store, 0, run, error);
}

#define RUN                                                                                        \
    "SELECT id, newest_review, reviews, people, candidates, begun_ms, finished_ms, settings, fit"  \
    " FROM consensus_run WHERE whole = 1 AND "

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
    return db_row(store, arena, fill_run, out, "There is no such run.", error, RUN "id = ?", "i",
                  run);
}

bool store_runs_list(struct store *store, struct base_arena *arena, int64_t before, size_t limit,
                     struct store_run **out, size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_run, out, count, error,
                   RUN "(?1 = 0 OR id < ?1) ORDER BY id DESC LIMIT ?2", "ii", before,
                   (int64_t)limit);
}
