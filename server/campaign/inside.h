/*
 * Inside the campaign: what its files share. Each part guards itself; the fields here are set by
 * campaign_open and stay.
 */
#ifndef CAMPAIGN_INSIDE_H
#define CAMPAIGN_INSIDE_H

#include <pthread.h>

#include "ebbmark/campaign.h"
#include "handout.h"
#include "passphrase.h"

struct writer;
struct runner;

struct campaign {
    struct store *store;
    struct base_pool *pool;     /* may be NULL */
    const struct base_log *log; /* may be NULL */
    pthread_mutex_t settings_lock;
    struct campaign_settings settings; /* under settings_lock */
    pthread_mutex_t loading;           /* held by the one load at work */
    struct passphrase_gate passphrases;
    unsigned char lease_key[STORE_HASH_SIZE];
    struct handout *handout;
    struct writer *writer;
    struct runner *runner;
};

/* One log line with one fact. */
static inline void campaign_tell(const struct campaign *campaign, enum base_log_level level,
                                 const char *event, const char *key, const char *value)
{
    base_log_line(campaign->log, level, event, key, value, (const char *)NULL);
}

/* Settings in force at opening: the stored ones over the defaults. */
bool settings_read(struct campaign *campaign, struct base_error *error);

/* ---- the writer: its thread starts with the first review ---- */

struct writer_figures {
    uint64_t waiting, taken, failed, groups;
};
bool writer_open(struct campaign *campaign, struct writer **out, struct base_error *error);
/* Store what waits, then join the thread. NULL is allowed. */
void writer_close(struct writer *writer);
struct writer_figures writer_figures_now(struct writer *writer);

/* ---- the runner: decides when a run is due, and sees to one at a time ---- */

struct runner_figures {
    uint64_t done, failed;
};
bool runner_open(struct campaign *campaign, struct runner **out, struct base_error *error);
/* Ask a run at work to stop at its next step, then join the thread. NULL is allowed. */
void runner_close(struct runner *runner);
/* A setting changed that may make a run due. */
void runner_look_again(struct runner *runner);
void runner_reviews_taken(struct runner *runner, uint64_t count);
struct runner_figures runner_figures_now(struct runner *runner);

#endif
