/*
 * The campaign: the work itself. It calls the pure rooms with arrays and the store with verbs.
 *
 * Threads: a campaign may be used from any thread. What it keeps in memory (the queue of open
 * segments, leases, who has seen what, settings) is guarded inside. It has two threads of its own:
 * the writer of reviews and the runner of consensus runs.
 */
#ifndef EBBMARK_CAMPAIGN_H
#define EBBMARK_CAMPAIGN_H

#include "ebbmark/lightcurve_read.h"
#include "ebbmark/log.h"
#include "ebbmark/pool.h"
#include "ebbmark/settings.h"
#include "ebbmark/store.h"

struct campaign;

/* Take over an open store (still the caller's to close, after campaign_close). `pool` carries the
 * parallel work and may be NULL; it is the caller's to close, after campaign_close. */
bool campaign_open(struct store *store, struct base_pool *pool, const struct base_log *log,
                   struct campaign **out, struct base_error *error);
/* Store what waits to be stored, stop a background run at its next step, join the threads, free.
 * Nobody else may be using the campaign any more. NULL is allowed. */
void campaign_close(struct campaign *campaign);
struct store *campaign_store(struct campaign *campaign);

/* ---- settings ---------------------------------------------------------------------------- */

/* A copy of what is in force. */
struct campaign_settings campaign_settings_now(struct campaign *campaign);
/* Check and store one setting given as text. BASE_NOT_FOUND for an unknown name, BASE_INVALID with
 * the range. */
bool campaign_setting_change(struct campaign *campaign, const char *name, const char *value,
                             int64_t person, struct base_error *error);

/* What goes on inside, for /metrics: numbers now, and totals since campaign_open. */
struct campaign_figures {
    uint64_t segments_queued; /* open segments that may be handed out */
    uint64_t leases_live;
    uint64_t people_remembered; /* whose looks are kept in memory */
    uint64_t reviews_waiting;   /* for the writer */
    uint64_t leases_given, reviews_taken, reviews_failed, review_groups;
    uint64_t runs_done, runs_failed;
};
struct campaign_figures campaign_figures_now(struct campaign *campaign);

/* ---- people ------------------------------------------------------------------------------ */

#define CAMPAIGN_HANDLE_CHARACTERS_MAX 32
#define CAMPAIGN_PASSPHRASE_BYTES_MIN 10
#define CAMPAIGN_PASSPHRASE_BYTES_MAX 512
#define CAMPAIGN_SECRET_SIZE 44   /* base64 text of 32 random bytes, with NUL */
#define CAMPAIGN_HASHES_AT_ONCE 2 /* passphrases hashed at the same time, 64 MiB each */
#define CAMPAIGN_HASHES_WAITING_MAX                                                                \
    32 /* more than this waiting for their turn: BASE_BUSY from every call marked slow */

/* Check a handle and make its key (NFKC, case folded, in `key`, 256 bytes), so that two handles
 * that read alike are one. BASE_INVALID: empty, over CAMPAIGN_HANDLE_CHARACTERS_MAX, controls or
 * invisible characters, or blanks at the ends. */
bool campaign_handle_key(const char *handle, char key[256], struct base_error *error);
/* Join. passphrase NULL makes a guest. handle NULL gives a guest an invented one (with a passphrase
 * it is BASE_INVALID). BASE_CONFLICT when the handle is taken, BASE_DENIED when the campaign is not
 * open. Slow: argon2id. */
bool campaign_join(struct campaign *campaign, const char *handle, const char *passphrase,
                   struct base_arena *arena, struct store_person *out, struct base_error *error);
/* Add a person of any role, by an admin's hand; passphrase may be NULL. */
bool campaign_person_add(struct campaign *campaign, const char *handle, const char *passphrase,
                         enum store_role role, int64_t *id, struct base_error *error);
/* BASE_DENIED with one and the same sentence for an unknown handle and a wrong passphrase, in the
 * same time. A suspended person with the right passphrase is told so, and only then is `out` filled
 * in after a refusal. Slow. */
bool campaign_sign_in(struct campaign *campaign, const char *handle, const char *passphrase,
                      struct base_arena *arena, struct store_person *out, struct base_error *error);
/* Choose a (new) passphrase. Slow. */
bool campaign_passphrase_set(struct campaign *campaign, int64_t person, const char *passphrase,
                             struct base_error *error);
/* A new session or token for a person, for `days` from now; the secret is told once and kept as a
 * hash only. */
bool campaign_access_give(struct campaign *campaign, enum store_access kind, int64_t person,
                          enum store_role role, double days, char secret[CAMPAIGN_SECRET_SIZE],
                          struct base_error *error);
/* BASE_NOT_FOUND when there is none or it has ended. A suspended person is found, and marked so. */
bool campaign_access_check(struct campaign *campaign, enum store_access kind, const char *secret,
                           struct store_access_found *out, struct base_error *error);
bool campaign_access_end(struct campaign *campaign, enum store_access kind, const char *secret,
                         struct base_error *error);

/* ---- loading ----------------------------------------------------------------------------- */

struct campaign_load_progress {
    uint64_t files_total, files_done, files_loaded, files_repeated, files_refused;
    uint64_t stars, points, bytes_total, bytes_done;
    uint64_t stars_left_out; /* in files of several stars that were loaded without them */
    double seconds, points_per_second, seconds_left; /* NAN until known */
};
struct campaign_load_options {
    const char *batch;        /* its name */
    const char *const *paths; /* path_count of them */
    size_t path_count;
    const char *catalogue; /* path, or NULL */
    struct lightcurve_mapping mapping;
    /* Called now and then from the thread that loads; false cancels. May be NULL. */
    bool (*progress)(void *context, const struct campaign_load_progress *progress);
    /* Called for each refused file, and for a loaded one that some of its stars were left out of;
     * from the thread that loads. May be NULL. */
    void (*refused)(void *context, const char *label, const char *reason);
    void *context;
};
/* Load paths as a batch, or go on with an unfinished batch of that name: files whose bytes are
 * there already are passed over as repeated. Reading, cleaning and trends run on the pool; files
 * are stored in groups, each in one transaction. BASE_CANCELLED and BASE_DISK_FULL leave a batch
 * that a second call resumes. True even when some files were refused (progress.files_refused).
 * While no file could be loaded at all the batch stays unfinished, so that the same name serves
 * once the files are mended. BASE_CONFLICT: a finished batch has that name. BASE_NOT_FOUND: a path
 * is not there; nothing was begun. BASE_BUSY: another load is at work. */
bool campaign_load(struct campaign *campaign, const struct campaign_load_options *options,
                   struct campaign_load_progress *result, struct base_error *error);
/* Take a batch's segments out of the queue; reviews stay. BASE_NOT_FOUND. */
bool campaign_batch_withdraw(struct campaign *campaign, int64_t batch, struct base_error *error);

/* ---- handing out ------------------------------------------------------------------------- */

#define CAMPAIGN_LEASE_SIZE 140      /* text of a lease, with NUL */
#define CAMPAIGN_LEASES_HELD_MAX 100 /* live leases of one person */
#define CAMPAIGN_LEASES_MAX 2000000  /* remembered leases of all people, live and lately ended */
#define CAMPAIGN_LEASE_AFTER_MS                                                                    \
    86400000 /* how long after its end a lease still lets its holder see the segment */

struct campaign_lease {
    char text[CAMPAIGN_LEASE_SIZE]; /* sealed: person, segment, end and a nonce; holds over a
                                       restart */
    int64_t expires_ms;
    struct store_segment segment;
};
/* Hand out the open segment with the fewest looks and live leases that this person has neither seen
 * nor holds; one of them at random. *found is false when nothing is left for them. BASE_BUSY over
 * CAMPAIGN_LEASES_HELD_MAX or CAMPAIGN_LEASES_MAX. O(log n) on average. */
bool campaign_lease_take(struct campaign *campaign, struct base_arena *arena, int64_t person,
                         struct campaign_lease *out, bool *found, struct base_error *error);
struct campaign_lease_read {
    int64_t person, segment, expires_ms;
    unsigned char nonce[16];
    bool expired;
};
/* Open a lease's seal. BASE_INVALID when it is not one of ours. */
bool campaign_lease_open(struct campaign *campaign, const char *text,
                         struct campaign_lease_read *out, struct base_error *error);
/* Has this person a lease, live or lately ended, or a review on the segment? Then they may see it.
 * Leases are remembered in memory, so after a restart this knows of reviews only. */
bool campaign_may_see(struct campaign *campaign, int64_t person, int64_t segment);
/* The same, or the person shows the text of a lease (NULL: none) that is ours, theirs, for this
 * segment, and ended at most CAMPAIGN_LEASE_AFTER_MS ago. The seal itself is the proof, so this
 * holds over a restart, and a page that sends its lease along never loses its segment. */
bool campaign_may_see_with(struct campaign *campaign, int64_t person, int64_t segment,
                           const char *lease);

enum campaign_view { CAMPAIGN_AS_MEASURED = 0, CAMPAIGN_TREND_REMOVED = 1 };

/* A segment's flux as plain arrays from the arena. Reads and unpacks the whole light curve, so what
 * is asked for often is for the caller to keep. */
struct campaign_flux {
    size_t count;
    const double *time, *flux; /* flux relative, about 1 */
    double median_flux, noise_point, starts_d;
    const char *time_reference;
};
bool campaign_flux_read(struct campaign *campaign, struct base_arena *arena,
                        const struct store_segment *segment, enum campaign_view view,
                        struct campaign_flux *out, struct base_error *error);

/* ---- taking reviews ---------------------------------------------------------------------- */

#define CAMPAIGN_REVIEWS_WAITING_MAX 4096 /* more than this waiting for the writer: BASE_BUSY */

/* Hand a review to the writer. It gathers what is waiting into one transaction and then calls
 * done(context, ok, error) on its own thread, after the commit, exactly once; `review` and what it
 * points to must live until then. With ok, what became of it is in review->outcome. False
 * (BASE_BUSY) when too many are waiting: done is not called. */
bool campaign_review_submit(struct campaign *campaign, struct store_review_new *review,
                            void (*done)(void *context, bool ok, const struct base_error *error),
                            void *context, struct base_error *error);

/* The checks of one review's marks against its segment: within it (by up to 0.01 d, which is then
 * clipped), starts before ends, finite, at most marks_most, low <= high. BASE_INVALID naming the
 * field ("marks[2].ends"). */
bool campaign_review_check(struct campaign *campaign, const struct store_segment *segment,
                           struct store_mark *marks, size_t count, struct base_error *error);

/* Reviews made elsewhere, from a CSV file of the documented columns: review, reviewer, star,
 * segment_starts, segment_ends, submitted, mark_starts, mark_ends, mark_low, mark_high, certainty;
 * others are passed over. A reviewer is found or made by handle, without a passphrase. A look
 * counts for the star's segment that shares most with it, which must be at least half of both.
 * A review that does not fit is refused with its line and the others are taken; adding the same
 * file again changes nothing. BASE_INVALID with the line when the file itself makes no sense. */
struct campaign_reviews_added {
    uint64_t reviews, marks, repeated, refused;
};
bool campaign_reviews_add_file(struct campaign *campaign, const char *path,
                               void (*refused)(void *context, uint64_t line, const char *reason),
                               void *context, struct campaign_reviews_added *out,
                               struct base_error *error);

/* ---- consensus --------------------------------------------------------------------------- */

/* Run over all reviews up to the newest, store the run, make it current. One at a time: BASE_BUSY
 * when another is at work. progress(context, fraction 0…1, stage) may be NULL. */
bool campaign_run(struct campaign *campaign,
                  void (*progress)(void *context, double fraction, const char *stage),
                  void *context, int64_t *run, struct base_error *error);
/* Ask for a run in the background; one starts by itself after enough new reviews or minutes.
 * BASE_CONFLICT when one is at work or asked for already. */
bool campaign_run_ask(struct campaign *campaign, struct base_error *error);
/* Is a run at work, how far, and how did the last one end? */
struct campaign_run_state {
    bool working;
    double fraction;
    char stage[48];
    char last_error[BASE_SENTENCE_SIZE];
};
struct campaign_run_state campaign_run_state_now(struct campaign *campaign);

/* Flags of a candidate: bit, name, sentence. The thresholds are common practice, no source. */
/* clang-format off */
#define CAMPAIGN_FLAGS(X) \
    X(1,  near_gap,     "An edge of the dip lies within half its duration of a gap.") \
    X(2,  little_data,  "Less than half of the dip is covered by data.") \
    X(4,  v_shaped,     "The dip has no flat bottom, as a grazing or eclipsing binary would.") \
    X(8,  not_measured, "Nothing could be measured at this place.") \
    X(16, brightening,  "The flux rises here instead of falling.") \
    X(32, lopsided,     "The two halves of the dip differ much.")
/* clang-format on */

#endif
