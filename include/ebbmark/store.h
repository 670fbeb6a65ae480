/*
 * The store: one database is one campaign. The only room that includes sqlite3.h; its verbs speak
 * of the domain, never of SQL, so that a second engine can stand behind them.
 *
 * Threads: every verb may be called from any thread. Reads run on a pool of connections of their
 * own; changes run one at a time on the single writing connection, inside a transaction each, and
 * are durable (WAL, synchronous=FULL) when the verb returns true.
 *
 * Memory: texts and arrays that a verb hands out are taken from the arena that the caller gives
 * and live as long as it. Times of day are unix milliseconds; star times are days.
 *
 * Errors, common to all verbs: BASE_DISK_FULL (nothing was changed), BASE_IO, BASE_CORRUPT,
 * BASE_MEMORY. Others are named at each verb. Text parameters are UTF-8 and never NULL.
 */
#ifndef EBBMARK_STORE_H
#define EBBMARK_STORE_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "ebbmark/arena.h"
#include "ebbmark/error.h"

struct store;

#define STORE_PUBLIC_ID_SIZE                                                                       \
    17 /* 16 lower-case hex digits and a NUL: ids that people see and that                         \
          say nothing of order or kind */
#define STORE_HASH_SIZE 32

/* ---- opening ---------------------------------------------------------------------------- */

struct store_options {
    unsigned readers; /* reading connections, default 4 */
    bool must_exist;  /* do not create */
};

/* Open or create the database: take the lock (FILE.lock, flock; held until close), check that it is
 * a database of ours, back it up (verified: integrity check and row counts; FILE.before-NNNN)
 * before each migration, migrate. BASE_CONFLICT: another process has it (the sentence says so, with
 * its process id). BASE_INVALID: it is not an Ebbmark database, or it is newer than this program;
 * then it is not touched. BASE_CORRUPT: it is ours and damaged. BASE_NOT_FOUND with must_exist. The
 * caller closes it, when no verb runs any more. A verb called from a visitor takes a reader of its
 * own, so `readers` must leave room for that. */
bool store_open(const char *path, const struct store_options *options, struct store **out,
                struct base_error *error);
void store_close(struct store *store);

/* The schema version of the open database, and the newest that this program knows. */
int store_version(const struct store *store);
int store_version_newest(void);

/* A random secret of 32 bytes that this database keeps under a name; made on first use. */
bool store_secret(struct store *store, const char *name, unsigned char out[STORE_HASH_SIZE],
                  struct base_error *error);

/* Settings as text; what a name means is the campaign room's business. */
struct store_setting {
    const char *name, *value;
};
bool store_settings_read(struct store *store, struct base_arena *arena, struct store_setting **out,
                         size_t *count, struct base_error *error);
bool store_setting_write(struct store *store, const char *name, const char *value, int64_t person,
                         struct base_error *error);

/* ---- people ----------------------------------------------------------------------------- */

enum store_role { STORE_REVIEWER = 1, STORE_SCIENCE = 2, STORE_ADMIN = 3 };

struct store_person {
    int64_t id;
    const char *handle;     /* as shown; "" after leaving */
    const char *handle_key; /* normalised form, unique; NULL after leaving */
    const char *passphrase; /* argon2id string of libsodium, or "" for a guest */
    enum store_role role;
    bool suspended, credit, left; /* credit: may be named in exports */
    int64_t joined_ms;
};

/* BASE_CONFLICT when the handle key is taken. */
bool store_person_add(struct store *store, const char *handle, const char *handle_key,
                      const char *passphrase, enum store_role role, int64_t now_ms, int64_t *id,
                      struct base_error *error);
/* BASE_NOT_FOUND. */
bool store_person_by_key(struct store *store, struct base_arena *arena, const char *handle_key,
                         struct store_person *out, struct base_error *error);
bool store_person_by_id(struct store *store, struct base_arena *arena, int64_t id,
                        struct store_person *out, struct base_error *error);
/* After id `after`, at most `limit`, by id. */
bool store_people_list(struct store *store, struct base_arena *arena, int64_t after, size_t limit,
                       struct store_person **out, size_t *count, struct base_error *error);
bool store_person_set_role(struct store *store, int64_t id, enum store_role role,
                           struct base_error *error);
bool store_person_set_suspended(struct store *store, int64_t id, bool suspended,
                                struct base_error *error);
bool store_person_set_passphrase(struct store *store, int64_t id, const char *passphrase,
                                 struct base_error *error);
bool store_person_set_credit(struct store *store, int64_t id, bool credit,
                             struct base_error *error);
/* Leave: handle, key and passphrase removed, sessions and tokens ended, reviews kept. */
bool store_person_forget(struct store *store, int64_t id, struct base_error *error);

/* Sessions and tokens are kept by SHA-256 only. ends_ms: when it stops being valid. */
enum store_access { STORE_SESSION, STORE_TOKEN };
bool store_access_add(struct store *store, enum store_access kind,
                      const unsigned char hash[STORE_HASH_SIZE], int64_t person,
                      enum store_role role, int64_t now_ms, int64_t ends_ms,
                      struct base_error *error);
struct store_access_found {
    int64_t person;
    enum store_role role; /* the person's; of a token the lower of the person's and its own */
    int64_t ends_ms;
    bool suspended;
};
/* BASE_NOT_FOUND when there is none or it has ended. */
bool store_access_find(struct store *store, enum store_access kind,
                       const unsigned char hash[STORE_HASH_SIZE], int64_t now_ms,
                       struct store_access_found *out, struct base_error *error);
bool store_access_end(struct store *store, enum store_access kind,
                      const unsigned char hash[STORE_HASH_SIZE], struct base_error *error);
/* Remove what ended before now. */
bool store_access_purge(struct store *store, int64_t now_ms, struct base_error *error);

/* ---- batches, stars, light curves, segments ---------------------------------------------- */

enum store_batch_state {
    STORE_BATCH_LOADING = 1,
    STORE_BATCH_READY = 2,
    STORE_BATCH_WITHDRAWN = 3
};

struct store_batch {
    int64_t id;
    const char *name, *source; /* source: where it came from, for people */
    enum store_batch_state state;
    int64_t begun_ms, finished_ms; /* finished 0: not yet */
    int64_t files_loaded, files_repeated, files_refused, stars, segments, points;
};

/* Begin a batch, or resume the unfinished one of that name (*resumed). BASE_CONFLICT when a
 * finished batch has the name already. */
bool store_batch_begin(struct store *store, const char *name, const char *source, int64_t now_ms,
                       int64_t *id, bool *resumed, struct base_error *error);
bool store_batch_finish(struct store *store, int64_t id, int64_t now_ms, struct base_error *error);
/* Segments stop being handed out; reviews stay. */
bool store_batch_withdraw(struct store *store, int64_t id, int64_t now_ms,
                          struct base_error *error);
bool store_batches_list(struct store *store, struct base_arena *arena, struct store_batch **out,
                        size_t *count, struct base_error *error);

enum store_file_outcome {
    STORE_FILE_UNKNOWN = 0,
    STORE_FILE_LOADED = 1,
    STORE_FILE_REPEATED = 2, /* same bytes as a file loaded before */
    STORE_FILE_REFUSED = 3
};
struct store_file {
    int64_t id, batch;
    const char *label, *reason; /* reason: a sentence, "" when loaded */
    enum store_file_outcome outcome;
    int64_t bytes;
};

/* What is known of these bytes: LOADED (with the batch that holds them) or UNKNOWN. */
bool store_file_seen(struct store *store, const unsigned char sha256[STORE_HASH_SIZE],
                     enum store_file_outcome *outcome, int64_t *batch, struct base_error *error);

/* Points of one light curve. Arrays of count values; error may be NULL. */
struct store_points {
    size_t count;
    const double *time; /* d */
    const float *flux;  /* relative flux minus 1 */
    const float *trend; /* relative trend minus 1 */
    const float *error; /* relative, or NULL */
};
struct store_star_properties { /* NAN where unknown */
    const char *name;
    double ra_deg, dec_deg, magnitude, temperature_k, radius_rsun, mass_msun;
};
struct store_light_curve_new {
    struct store_star_properties star; /* made, or unknown properties filled in */
    const char *time_reference;
    struct store_points points;
    double median_flux, cadence_d, noise_point, noise_window[4];
    struct store_span {
        size_t first, count;
        double starts_d, ends_d;
    } const *segments;
    size_t segment_count;
};
struct store_file_new {
    int64_t batch;
    const char *label, *reason;
    unsigned char sha256[STORE_HASH_SIZE];
    enum store_file_outcome outcome;
    int64_t bytes;
    const struct store_light_curve_new *curves; /* none unless LOADED */
    size_t curve_count;
};
/* Record several files' outcomes with all their light curves and segments in one transaction: after
 * a kill each file is there whole or not at all. Points are compressed before the lock is taken. A
 * refused file of the same label and batch is replaced, so that a resumed load can mend it. */
bool store_files_add(struct store *store, const struct store_file_new *files, size_t count,
                     struct base_error *error);
bool store_batch_files(struct store *store, struct base_arena *arena, int64_t batch, int64_t after,
                       size_t limit, struct store_file **out, size_t *count,
                       struct base_error *error);

struct store_star {
    int64_t id;
    struct store_star_properties properties;
    int64_t light_curves, segments, reviews;
};
bool store_star_by_name(struct store *store, struct base_arena *arena, const char *name,
                        struct store_star *out, struct base_error *error);
bool store_stars_list(struct store *store, struct base_arena *arena, int64_t after, size_t limit,
                      struct store_star **out, size_t *count, struct base_error *error);

struct store_light_curve {
    int64_t id, star, batch;
    const char *star_name, *time_reference;
    double median_flux, cadence_d, noise_point, noise_window[4];
    double starts_d, ends_d;
    size_t count;
};
/* All light curves of a star, by id. */
bool store_light_curves_of_star(struct store *store, struct base_arena *arena, int64_t star,
                                struct store_light_curve **out, size_t *count,
                                struct base_error *error);
bool store_light_curve_read(struct store *store, struct base_arena *arena, int64_t light_curve,
                            struct store_light_curve *out, struct base_error *error);
/* Decompress and check the points. BASE_CORRUPT when the blob is not what was written. */
bool store_points_read(struct store *store, struct base_arena *arena, int64_t light_curve,
                       struct store_points *out, struct base_error *error);

struct store_segment {
    int64_t id, light_curve, star, batch;
    char public_id[STORE_PUBLIC_ID_SIZE];
    const char *time_reference;
    size_t first, count;
    double starts_d, ends_d;
    int64_t looks;
    bool open; /* still handed out: its batch is ready, and it is not settled */
};
/* BASE_NOT_FOUND. */
bool store_segment_by_public_id(struct store *store, struct base_arena *arena,
                                const char *public_id, struct store_segment *out,
                                struct base_error *error);
bool store_segment_by_id(struct store *store, struct base_arena *arena, int64_t id,
                         struct store_segment *out, struct base_error *error);
/* All segments of a star, open or not, by id. */
bool store_segments_of_star(struct store *store, struct base_arena *arena, int64_t star,
                            struct store_segment **out, size_t *count, struct base_error *error);
/* Every open segment, by id: for building the queue at start. Return false to stop. */
struct store_open_segment {
    int64_t id, star;
    int32_t looks;
};
bool store_segments_open_each(struct store *store,
                              bool (*visit)(void *context, const struct store_open_segment *),
                              void *context, struct base_error *error);
/* Segments that a person has reviewed, ascending. */
bool store_person_segments(struct store *store, struct base_arena *arena, int64_t person,
                           int64_t **out, size_t *count, struct base_error *error);
bool store_segments_settle(struct store *store, const int64_t *segments, size_t count, bool settled,
                           struct base_error *error);

/* ---- reviews ---------------------------------------------------------------------------- */

enum store_condition { STORE_BREAK = 1, STORE_KEEPS_CHANGING = 2 }; /* bits */

struct store_mark {
    int64_t id, review;
    double starts_d, ends_d; /* d, in the light curve's time reference */
    double low, high;        /* relative flux */
    bool sure;
};

enum store_review_outcome {
    STORE_REVIEW_TAKEN = 1,      /* stored now */
    STORE_REVIEW_REPEATED = 2,   /* same person, key and body as one stored before: its id */
    STORE_REVIEW_KEY_REUSED = 3, /* the key was used for another body; nothing stored */
    STORE_REVIEW_LEASE_USED = 4, /* the lease has a review already; nothing stored */
    STORE_REVIEW_CLOSED = 5      /* late, and the segment is no longer open; nothing stored */
};
struct store_review_new {
    int64_t person, segment;
    const char *key;                          /* Idempotency-Key, 1 to 200 bytes */
    unsigned char body_hash[STORE_HASH_SIZE]; /* of what was sent */
    unsigned char lease[16];                  /* the lease's nonce */
    bool late;                                /* the lease had expired: take only if still open */
    int64_t submitted_ms;
    double seconds;                 /* time spent looking, as the page measured it */
    unsigned conditions;            /* enum store_condition bits */
    const struct store_mark *marks; /* id and review are ignored */
    size_t mark_count;
    /* filled in: */
    enum store_review_outcome outcome;
    int64_t review; /* id, where TAKEN or REPEATED */
    bool was_late;  /* of the stored review */
};
/* Take any number of reviews in one durable transaction, in order. Each gets its outcome; a false
 * return means that none of them was stored. */
bool store_reviews_add(struct store *store, struct store_review_new *const *reviews, size_t count,
                       struct base_error *error);

/* Reviews made elsewhere: the reviewer is found or made by handle without a passphrase; the key is
 * "elsewhere:" and the file's review name, so that adding the same file again changes nothing. */

/* The id of the newest review, 0 when there is none, and how many there are. */
bool store_reviews_high_water(struct store *store, int64_t *newest, int64_t *count,
                              struct base_error *error);

struct store_look { /* a review, as the consensus sees it */
    int64_t review, person, segment, light_curve;
    double starts_d, ends_d; /* of the segment */
    unsigned conditions;
    double seconds;
    int64_t submitted_ms;
};
/* Ids of stars with at least one review up to `newest`, ascending. */
bool store_reviewed_stars(struct store *store, struct base_arena *arena, int64_t newest,
                          int64_t **out, size_t *count, struct base_error *error);
/* All looks (by review id) and marks (by mark id) on a star up to review `newest`. */
bool store_star_looks(struct store *store, struct base_arena *arena, int64_t star, int64_t newest,
                      struct store_look **looks, size_t *look_count, struct store_mark **marks,
                      size_t *mark_count, struct base_error *error);
/* Ids of people with at least one review up to `newest`, ascending. */
bool store_reviewing_people(struct store *store, struct base_arena *arena, int64_t newest,
                            int64_t **out, size_t *count, struct base_error *error);

/* Every review with its marks, by id, for export; one call a mark, or one with mark NULL for a look
 * without marks. handle is "" for people who left. Return false to stop. */
struct store_review_row {
    int64_t review, person;
    const char *handle, *star, *segment; /* segment: public id */
    double segment_starts_d, segment_ends_d;
    const char *time_reference;
    int64_t submitted_ms;
    unsigned conditions;
    double seconds;
    const struct store_mark *mark;
};
bool store_reviews_each(struct store *store, int64_t newest,
                        bool (*visit)(void *context, const struct store_review_row *row),
                        void *context, struct base_error *error);

/* One person's own reviews, newest first, before review `before` (0: from the newest). */
struct store_own_review {
    int64_t review;
    char segment[STORE_PUBLIC_ID_SIZE];
    int64_t submitted_ms;
    double starts_d, ends_d;
    const char *time_reference;
    size_t mark_count;
    const struct store_mark *marks;
    unsigned conditions;
    bool late;
};
struct store_own_totals {
    int64_t looks, marks, first_ms, last_ms;
    double days_looked;
};
bool store_person_record(struct store *store, struct base_arena *arena, int64_t person,
                         int64_t before, size_t limit, struct store_own_totals *totals,
                         struct store_own_review **out, size_t *count, struct base_error *error);

/* ---- consensus runs ---------------------------------------------------------------------- */

struct store_run {
    int64_t id;            /* the run's number, from 1 */
    int64_t newest_review; /* all reviews up to and including this one */
    int64_t reviews, people, candidates;
    int64_t begun_ms, finished_ms;
    const char *settings; /* JSON object: everything needed to repeat it */
    const char *fit;      /* JSON object: prior, log-likelihood, rounds, converged … */
};

/* A candidate: a group with its probability and measures. NAN where not measured. */
struct store_candidate {
    int64_t id; /* the id of the group's oldest mark: the same from run to run */
    int64_t run, star, light_curve;
    const char *star_name, *time_reference, *batch_name;
    double ra_deg, dec_deg;
    double starts_d, ends_d, mid_d, mid_error_d;
    double probability, log_odds, marks_only_probability;
    double term_looks, term_time, term_snr, term_prior;
    int64_t looks, marks;
    double snr, depth_ppm, depth_error_ppm, duration_h, duration_error_h;
    double ingress_fraction, covered, gap_distance_d, asymmetry;
    double spread_starts_d, spread_ends_d;    /* robust scatter of the marks' edges */
    double period_d, period_error_d, epoch_d; /* NAN until linked */
    int64_t transits, other_stars;
    unsigned flags;      /* bits of the campaign room's table of flags */
    const char *verdict; /* latest: "keep", "reject", "unsure" or "" */
};
struct store_member {
    int64_t candidate, mark;
};
struct store_skill {
    int64_t person;
    const char *handle; /* on reading only */
    int64_t looks, marks;
    double days_looked;
    /* At a dip of SNR 10; at what others marked and is no dip; with 90 % intervals. */
    double hit, hit_low, hit_high, chance, chance_low, chance_high, weight;
};
struct store_run_new {
    struct store_run run; /* id is filled in */
    const struct store_candidate *candidates;
    size_t candidate_count;
    const struct store_member *members;
    size_t member_count;
    const struct store_skill *skills;
    size_t skill_count;
};
/* Store a whole run and make it the current one. It is written in pieces, between which others may
 * write, and is seen by nobody until the last transaction has made it count; one that was cut short
 * is never seen, and its number is given again. */
bool store_run_add(struct store *store, struct store_run_new *run, struct base_error *error);
/* The current run's number, 0 when there is none. */
bool store_run_current(struct store *store, int64_t *run, struct base_error *error);
bool store_run_read(struct store *store, struct base_arena *arena, int64_t run,
                    struct store_run *out, struct base_error *error);
bool store_runs_list(struct store *store, struct base_arena *arena, int64_t before, size_t limit,
                     struct store_run **out, size_t *count, struct base_error *error);

enum store_candidate_order {
    STORE_BY_PROBABILITY,
    STORE_BY_SNR,
    STORE_BY_DEPTH,
    STORE_BY_DURATION,
    STORE_BY_STAR,
    STORE_BY_TIME,
    STORE_BY_LOOKS,
    STORE_BY_MARKS
};
struct store_candidate_query {
    int64_t run;                        /* 0: the current one */
    double min_probability;             /* 0: all */
    const char *star, *batch, *verdict; /* "" : any; verdict "none": those without one */
    enum store_candidate_order order;
    bool ascending;
    int64_t offset; /* rows to pass over */
    size_t limit;   /* 0: no limit */
};
/* Order is total: ties are broken by candidate id, in the same direction; what was not measured
 * comes last in both. The rows live as long as the arena. `total` (may
 * be NULL) is how many match in all. */
bool store_candidates_find(struct store *store, struct base_arena *arena,
                           const struct store_candidate_query *query, struct store_candidate **out,
                           size_t *count, int64_t *total, struct base_error *error);
/* run 0: the current one. BASE_NOT_FOUND. */
bool store_candidate_read(struct store *store, struct base_arena *arena, int64_t run,
                          int64_t candidate, struct store_candidate *out, struct base_error *error);
/* The marks of a candidate with their reviewers' skill weights. */
struct store_candidate_mark {
    struct store_mark mark;
    int64_t person;
    const char *handle;
    double weight;
};
bool store_candidate_marks(struct store *store, struct base_arena *arena, int64_t run,
                           int64_t candidate, struct store_candidate_mark **out, size_t *count,
                           struct base_error *error);
/* Candidates of the current run that a person's marks are part of, most probable first. */
bool store_person_candidates(struct store *store, struct base_arena *arena, int64_t person,
                             size_t limit, struct store_candidate **out, size_t *count,
                             struct base_error *error);
bool store_skills_list(struct store *store, struct base_arena *arena, int64_t run,
                       struct store_skill **out, size_t *count, struct base_error *error);
/* One person's skill in the current run; BASE_NOT_FOUND. */
bool store_skill_read(struct store *store, int64_t person, struct store_skill *out,
                      struct base_error *error);

/* Verdicts: history is kept, the latest counts. They follow a candidate by its id. */
struct store_verdict {
    int64_t id, candidate, person, given_ms;
    const char *handle, *verdict, *note;
};
bool store_verdict_add(struct store *store, int64_t candidate, int64_t person, const char *verdict,
                       const char *note, int64_t now_ms, int64_t *id, struct base_error *error);
bool store_verdicts_list(struct store *store, struct base_arena *arena, int64_t candidate,
                         struct store_verdict **out, size_t *count, struct base_error *error);

/* ---- figures and copies ------------------------------------------------------------------ */

struct store_counts {
    int64_t stars, light_curves, segments, open_segments, reviews, marks, people, runs;
};
bool store_count(struct store *store, struct store_counts *out, struct base_error *error);

/* Copy the open database to a new file, online, and verify the copy (integrity check, row counts of
 * every table). It appears whole or not at all. BASE_CONFLICT when the file exists. */
bool store_backup(struct store *store, const char *path, struct base_error *error);

/* Is this file, which nobody has open, a sound database of ours that this program can read? Changes
 * nothing. BASE_INVALID: it is not ours, or newer. BASE_CORRUPT: it is damaged. */
bool store_backup_check(const char *path, int *version, struct base_error *error);

/* Put a backup in the place of a database that no process has open (BASE_CONFLICT otherwise): the
 * copy is verified first; then a database that is there already, damaged or not, is kept as
 * FILE.replaced-<now_ms> (*replaced). Opening it migrates it. */
bool store_restore(const char *backup, const char *path, int64_t now_ms, bool *replaced,
                   struct base_error *error);

/* Can the store write now? A cheap check for readyz: the disk has room, the lock is held. */
bool store_ready(struct store *store, struct base_error *error);

#endif
