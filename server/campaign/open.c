#include <assert.h>
#include <sodium.h>
#include <stdlib.h>

#include "inside.h"

bool campaign_open(struct store *store, struct base_pool *pool, const struct base_log *log,
                   struct campaign **out, struct base_error *error)
{
    assert(store != NULL && out != NULL);
    *out = NULL;
    if (sodium_init() < 0)
        return base_fail(error, BASE_INTERNAL, "The cryptographic library does not start.");
    struct campaign *campaign = calloc(1, sizeof *campaign);
    if (campaign == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory to open the campaign.");
    campaign->store = store;
    campaign->pool = pool;
    campaign->log = log;
    (void)pthread_mutex_init(&campaign->settings_lock, NULL);
    (void)pthread_mutex_init(&campaign->loading, NULL);
    passphrase_gate_open(&campaign->passphrases);
    bool ok = settings_read(campaign, error) &&
              store_secret(store, "lease", campaign->lease_key, error) &&
              handout_open(store, &campaign->handout, error) &&
              runner_open(campaign, &campaign->runner, error) &&
              writer_open(campaign, &campaign->writer, error);
    if (!ok) {
        campaign_close(campaign);
        return false;
    }
    *out = campaign;
    return true;
}

void campaign_close(struct campaign *campaign)
{
    if (campaign == NULL)
        return;
    writer_close(campaign->writer);
    runner_close(campaign->runner);
    handout_close(campaign->handout);
    sodium_memzero(campaign->lease_key, sizeof campaign->lease_key);
    passphrase_gate_close(&campaign->passphrases);
    (void)pthread_mutex_destroy(&campaign->loading);
    (void)pthread_mutex_destroy(&campaign->settings_lock);
    free(campaign);
}

struct store *campaign_store(struct campaign *campaign)
{
    return campaign->store;
}

struct campaign_figures campaign_figures_now(struct campaign *campaign)
{
    const struct handout_figures handout = handout_figures_now(campaign->handout);
    const struct writer_figures writer = writer_figures_now(campaign->writer);
    const struct runner_figures runner = runner_figures_now(campaign->runner);
    return (struct campaign_figures){.segments_queued = handout.queued,
                                     .leases_live = handout.live,
                                     .people_remembered = handout.people,
                                     .reviews_waiting = writer.waiting,
                                     .leases_given = handout.given,
                                     .reviews_taken = writer.taken,
                                     .reviews_failed = writer.failed,
                                     .review_groups = writer.groups,
                                     .runs_done = runner.done,
                                     .runs_failed = runner.failed};
}
