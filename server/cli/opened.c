#include "cli.h"

#include <stdio.h>
#include <string.h>
#include <unistd.h>

volatile sig_atomic_t cli_stop_asked = 0;

static void ask_to_stop(int number)
{
    (void)number;
    cli_stop_asked = 1;
}

void cli_signals_catch(void)
{
    struct sigaction action = {.sa_handler = ask_to_stop};
    (void)sigemptyset(&action.sa_mask);
    (void)sigaction(SIGINT, &action, NULL);
    (void)sigaction(SIGTERM, &action, NULL);
    struct sigaction ignore = {.sa_handler = SIG_IGN};
    (void)sigaction(SIGPIPE, &ignore, NULL);
}

int cli_fail(const struct base_error *error)
{
    (void)fprintf(stderr, "ebbmark: %s\n", error->sentence);
    return CLI_FAILED;
}

bool cli_campaign_open(struct cli_campaign *opened, const char *database, bool must_exist,
                       struct base_error *error)
{
    *opened = (struct cli_campaign){.log = {.fd = STDERR_FILENO, .least = BASE_LOG_WARNING}};
    long processors = sysconf(_SC_NPROCESSORS_ONLN);
    unsigned threads = processors < 1 ? 1 : processors > 64 ? 64 : (unsigned)processors;
    const struct store_options options = {.readers = threads + 12, .must_exist = must_exist};
    bool ok = store_open(database, &options, &opened->store, error) &&
              base_pool_open(&opened->pool, threads, 1024, error) &&
              campaign_open(opened->store, opened->pool, &opened->log, &opened->campaign, error);
    if (!ok)
        cli_campaign_close(opened);
    return ok;
}

void cli_campaign_close(struct cli_campaign *opened)
{
    if (opened->campaign != NULL)
        campaign_close(opened->campaign);
    base_pool_close(opened->pool);
    if (opened->store != NULL)
        store_close(opened->store);
    *opened = (struct cli_campaign){0};
}
