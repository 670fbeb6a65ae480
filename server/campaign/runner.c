/*
 * The runner: one consensus run at a time, by hand or when enough has come in. Its thread sleeps
 * until a run is due; the run itself is in run.c.
 */
#include <assert.h>
#include <errno.h>
#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#include "ebbmark/clock.h"
#include "inside.h"
#include "run.h"

#define HOUR_S 3600.0

struct runner {
    struct campaign *campaign;
    atomic_bool stop;     /* tells a run at work to end */
    pthread_mutex_t lock; /* guards everything below */
    pthread_cond_t changed;
    bool closing, asked, working, started;
    uint64_t new_reviews; /* since the newest run began */
    double waiting_since; /* monotonic, of the oldest of them; NAN when there are none */
    double purge_at;      /* monotonic: when ended sign-ins are next removed */
    struct campaign_run_state state;
    struct runner_figures figures;
    pthread_t thread; /* once started */
};

/* ---- one run ---- */

/* What a progress call needs; lives on the stack of the run. */
struct watching {
    struct runner *runner;
    void (*progress)(void *context, double fraction, const char *stage);
    void *context;
};

static void watch(void *context, double fraction, const char *stage)
{
    struct watching *watching = context;
    struct runner *runner = watching->runner;
    (void)pthread_mutex_lock(&runner->lock);
    runner->state.fraction = fraction;
    (void)snprintf(runner->state.stage, sizeof runner->state.stage, "%s", stage);
    (void)pthread_mutex_unlock(&runner->lock);
    if (watching->progress != NULL)
        watching->progress(watching->context, fraction, stage);
}

/* Take the right to run. */
static bool begin(struct runner *runner, struct base_error *error)
{
    (void)pthread_mutex_lock(&runner->lock);
    bool free_now = !runner->working;
    if (free_now) {
        runner->working = true;
        runner->asked = false;
        runner->new_reviews = 0;
        runner->waiting_since = NAN;
        runner->state.fraction = 0.0;
        (void)snprintf(runner->state.stage, sizeof runner->state.stage, "starting");
    }
    (void)pthread_mutex_unlock(&runner->lock);
    return free_now || base_fail(error, BASE_BUSY, "A consensus run is at work already.");
}

static void end(struct runner *runner, bool ok, const struct base_error *error)
{
    (void)pthread_mutex_lock(&runner->lock);
    runner->working = false;
    if (ok)
        runner->figures.done++;
    else
        runner->figures.failed++;
    /* What a failed run has not seen is due again in the usual time. */
    if (!ok && isnan(runner->waiting_since))
        runner->waiting_since = base_clock_monotonic_s();
    (void)snprintf(runner->state.last_error, sizeof runner->state.last_error, "%s",
                   ok ? "" : error->sentence);
    (void)pthread_cond_signal(&runner->changed);
    (void)pthread_mutex_unlock(&runner->lock);
}

bool campaign_run(struct campaign *campaign,
                  void (*progress)(void *context, double fraction, const char *stage),
                  void *context, int64_t *run, struct base_error *error)
{
    struct runner *runner = campaign->runner;
    if (!begin(runner, error))
        return false;
    struct watching watching = {runner, progress, context};
    const struct run_order order = {.stop = &runner->stop, .progress = watch, .context = &watching};
    struct base_error problem = {0};
    bool ok = run_whole(campaign, &order, run, &problem);
    end(runner, ok, &problem);
    if (!ok && error != NULL)
        *error = problem;
    return ok;
}

/* ---- the thread ---- */

/* Seconds until a run is due by itself or by hand; 0 or less: now. The lock is held. */
static double due_in(const struct runner *runner, const struct campaign_settings *settings,
                     double now)
{
    if (runner->working)
        return HOUR_S;
    if (runner->asked || (settings->run_after_reviews > 0 &&
                          runner->new_reviews >= (uint64_t)settings->run_after_reviews))
        return 0.0;
    if (settings->run_after_minutes > 0 && !isnan(runner->waiting_since))
        return runner->waiting_since + 60.0 * (double)settings->run_after_minutes - now;
    return HOUR_S;
}

static void run_in_background(struct campaign *campaign)
{
    struct base_error error = {0};
    int64_t number = 0;
    double began = base_clock_monotonic_s();
    char run[24], seconds[BASE_CLOCK_SIZE];
    bool ok = campaign_run(campaign, NULL, NULL, &number, &error);
    (void)snprintf(run, sizeof run, "%" PRId64, number);
    (void)snprintf(seconds, sizeof seconds, "%.3f", base_clock_monotonic_s() - began);
    if (ok)
        base_log_line(campaign->log, BASE_LOG_INFO, "run_done", "run", run, "seconds", seconds,
                      (const char *)NULL);
    else if (error.kind != BASE_BUSY && error.kind != BASE_CANCELLED)
        campaign_tell(campaign, BASE_LOG_ERROR, "run_failed", "detail", error.sentence);
}

/* Sessions and tokens that have ended are of no use to anybody. */
static void purge(struct campaign *campaign)
{
    struct base_error error = {0};
    if (!store_access_purge(campaign->store, base_clock_unix_ms(), &error))
        campaign_tell(campaign, BASE_LOG_WARNING, "purge_failed", "detail", error.sentence);
}

/* Sleep until `seconds` from now, or until something changes. The lock is held. */
static void sleep_for(struct runner *runner, double seconds)
{
    struct timespec until;
    (void)clock_gettime(CLOCK_MONOTONIC, &until);
    double whole = floor(seconds);
    until.tv_sec += (time_t)whole;
    until.tv_nsec += (long)((seconds - whole) * 1e9);
    if (until.tv_nsec >= 1000000000) {
        until.tv_nsec -= 1000000000;
        until.tv_sec++;
    }
    (void)pthread_cond_timedwait(&runner->changed, &runner->lock, &until);
}

/* One turn: do what is due, or sleep. The lock is held on entry and on return. */
static void turn(struct runner *runner)
{
    double now = base_clock_monotonic_s();
    bool purge_due = now >= runner->purge_at;
    (void)pthread_mutex_unlock(&runner->lock);
    const struct campaign_settings settings = campaign_settings_now(runner->campaign);
    (void)pthread_mutex_lock(&runner->lock);
    double seconds = due_in(runner, &settings, now);
    if (purge_due)
        runner->purge_at = now + HOUR_S;
    if (!purge_due && seconds > 0.0) {
        if (!runner->closing)
            sleep_for(runner, fmin(seconds, runner->purge_at - now));
        return;
    }
    (void)pthread_mutex_unlock(&runner->lock);
    if (purge_due)
        purge(runner->campaign);
    if (seconds <= 0.0)
        run_in_background(runner->campaign);
    (void)pthread_mutex_lock(&runner->lock);
}

static void *run_when_due(void *argument)
{
    struct runner *runner = argument;
    (void)pthread_mutex_lock(&runner->lock);
    while (!runner->closing)
        turn(runner);
    (void)pthread_mutex_unlock(&runner->lock);
    return NULL;
}

/* Reviews that came before this start and are in no run wait from now. */
static bool count_waiting(struct runner *runner, struct base_error *error)
{
    struct store *store = runner->campaign->store;
    int64_t newest = 0, count = 0, current = 0;
    struct base_arena *arena = base_arena_new(0);
    struct store_run run = {0};
    bool ok = arena != NULL
                  ? store_reviews_high_water(store, &newest, &count, error) &&
                        store_run_current(store, &current, error) &&
                        (current == 0 || store_run_read(store, arena, current, &run, error))
                  : base_fail(error, BASE_MEMORY, "There is no memory to look at the runs.");
    if (ok && newest > run.newest_review)
        runner->waiting_since = base_clock_monotonic_s();
    base_arena_free(arena);
    return ok;
}

bool runner_open(struct campaign *campaign, struct runner **out, struct base_error *error)
{
    *out = NULL;
    struct runner *runner = calloc(1, sizeof *runner);
    if (runner == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for the consensus runs.");
    runner->campaign = campaign;
    runner->waiting_since = NAN;
    runner->purge_at = base_clock_monotonic_s() + 60.0;
    atomic_init(&runner->stop, false);
    pthread_condattr_t monotonic;
    (void)pthread_condattr_init(&monotonic);
    (void)pthread_condattr_setclock(&monotonic, CLOCK_MONOTONIC);
    (void)pthread_cond_init(&runner->changed, &monotonic);
    (void)pthread_condattr_destroy(&monotonic);
    (void)pthread_mutex_init(&runner->lock, NULL);
    bool ok = count_waiting(runner, error);
    int failed = ok ? pthread_create(&runner->thread, NULL, run_when_due, runner) : 0;
    runner->started = ok && failed == 0;
    if (failed != 0)
        ok = base_fail_errno(error, failed, "Starting the thread of the consensus runs");
    if (!ok) {
        runner_close(runner);
        return false;
    }
    *out = runner;
    return true;
}

void runner_close(struct runner *runner)
{
    if (runner == NULL)
        return;
    atomic_store(&runner->stop, true);
    (void)pthread_mutex_lock(&runner->lock);
    runner->closing = true;
    (void)pthread_cond_signal(&runner->changed);
    (void)pthread_mutex_unlock(&runner->lock);
    if (runner->started)
        (void)pthread_join(runner->thread, NULL);
    (void)pthread_cond_destroy(&runner->changed);
    (void)pthread_mutex_destroy(&runner->lock);
    free(runner);
}

/* ---- from outside ---- */

void runner_look_again(struct runner *runner)
{
    (void)pthread_mutex_lock(&runner->lock);
    (void)pthread_cond_signal(&runner->changed);
    (void)pthread_mutex_unlock(&runner->lock);
}

void runner_reviews_taken(struct runner *runner, uint64_t count)
{
    (void)pthread_mutex_lock(&runner->lock);
    runner->new_reviews += count;
    if (isnan(runner->waiting_since))
        runner->waiting_since = base_clock_monotonic_s();
    (void)pthread_cond_signal(&runner->changed);
    (void)pthread_mutex_unlock(&runner->lock);
}

bool campaign_run_ask(struct campaign *campaign, struct base_error *error)
{
    struct runner *runner = campaign->runner;
    (void)pthread_mutex_lock(&runner->lock);
    bool ok = !runner->working && !runner->asked;
    if (ok) {
        runner->asked = true;
        (void)pthread_cond_signal(&runner->changed);
    }
    (void)pthread_mutex_unlock(&runner->lock);
    return ok || base_fail(error, BASE_CONFLICT, "A consensus run is at work already.");
}

struct campaign_run_state campaign_run_state_now(struct campaign *campaign)
{
    struct runner *runner = campaign->runner;
    (void)pthread_mutex_lock(&runner->lock);
    struct campaign_run_state state = runner->state;
    state.working = runner->working || runner->asked;
    if (!runner->working) {
        state.fraction = 0.0;
        (void)snprintf(state.stage, sizeof state.stage, "%s",
                       runner->asked ? "waiting to start" : "");
    }
    (void)pthread_mutex_unlock(&runner->lock);
    return state;
}

struct runner_figures runner_figures_now(struct runner *runner)
{
    (void)pthread_mutex_lock(&runner->lock);
    const struct runner_figures figures = runner->figures;
    (void)pthread_mutex_unlock(&runner->lock);
    return figures;
}
