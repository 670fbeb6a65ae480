#include "cli.h"

#include <inttypes.h>
#include <stdio.h>

static void tell_refused(void *context, uint64_t line, const char *reason)
{
    (void)context;
    (void)fprintf(stderr, "refused  line %" PRIu64 ": %s\n", line, reason);
}

int cli_reviews(int argc, char **argv)
{
    const char *database = NULL, *file = NULL;
    int rest;
    bool help;
    const struct cli_option options[] = {
        {"database", &database, NULL, true}, {"add", &file, NULL, true}, {NULL, NULL, NULL, false}};
    if (!cli_options_read(argc, argv, options, &rest, &help))
        return cli_usage("reviews", help);
    struct base_error error = {0};
    struct cli_campaign opened;
    struct campaign_reviews_added added = {0};
    if (!cli_campaign_open(&opened, database, true, &error))
        return cli_fail(&error);
    bool ok = campaign_reviews_add_file(opened.campaign, file, tell_refused, NULL, &added, &error);
    cli_campaign_close(&opened);
    if (!ok)
        return cli_fail(&error);
    (void)printf("%" PRIu64 " reviews added with %" PRIu64 " marks; %" PRIu64
                 " were there already; %" PRIu64 " refused.\n",
                 added.reviews, added.marks, added.repeated, added.refused);
    return added.refused > 0 ? CLI_PARTLY : CLI_DONE;
}
