#include "cli.h"

#include <inttypes.h>
#include <stdio.h>
#include <unistd.h>

static void show(void *context, double fraction, const char *stage)
{
    (void)context;
    (void)fprintf(stderr, "\r%3.0f %%  %-40s", 100.0 * fraction, stage);
    (void)fflush(stderr);
}

/* Say what the run found. */
static bool tell(struct store *store, int64_t number, struct base_error *error)
{
    struct base_arena *arena = base_arena_new(0);
    struct store_run run = {0};
    const struct store_candidate_query likely = {
        .run = number, .min_probability = 0.9, .star = "", .batch = "", .verdict = "", .limit = 1};
    struct store_candidate *rows = NULL;
    size_t count = 0;
    int64_t total = 0;
    bool ok = arena != NULL
                  ? store_run_read(store, arena, number, &run, error) &&
                        store_candidates_find(store, arena, &likely, &rows, &count, &total, error)
                  : base_fail(error, BASE_MEMORY, "There is no memory to read the run.");
    if (ok)
        (void)printf("Run %" PRId64 ": %" PRId64 " reviews by %" PRId64 " people, %" PRId64
                     " candidates, %" PRId64 " of them with a probability of 0.9 or more.\n"
                     "A candidate is not a confirmed planet: eclipsing binaries and instrument "
                     "artefacts remain.\n",
                     run.id, run.reviews, run.people, run.candidates, total);
    base_arena_free(arena);
    return ok;
}

int cli_consensus(int argc, char **argv)
{
    const char *database = NULL;
    int rest;
    bool help;
    const struct cli_option options[] = {{"database", &database, NULL, true},
                                         {NULL, NULL, NULL, false}};
    if (!cli_options_read(argc, argv, options, &rest, &help))
        return cli_usage("consensus", help);
    struct base_error error = {0};
    struct cli_campaign opened;
    int64_t run = 0;
    bool on_terminal = isatty(STDERR_FILENO) == 1;
    if (!cli_campaign_open(&opened, database, true, &error))
        return cli_fail(&error);
    bool ok = campaign_run(opened.campaign, on_terminal ? show : NULL, NULL, &run, &error);
    if (on_terminal)
        (void)fprintf(stderr, "\r%50s\r", "");
    ok = ok && tell(opened.store, run, &error);
    cli_campaign_close(&opened);
    return ok ? CLI_DONE : cli_fail(&error);
}
