#include "cli.h"

#include <inttypes.h>
#include <stdio.h>
#include <unistd.h>

#include "ebbmark/rehearse.h"

static bool show(void *context, uint64_t reviews, uint64_t marks, double seconds)
{
    if (*(bool *)context && reviews % 20 == 0) {
        (void)fprintf(stderr, "\r%" PRIu64 " reviews  %" PRIu64 " marks  %.0f reviews/s \x1b[K",
                      reviews, marks, (double)reviews / (seconds > 0.1 ? seconds : 0.1));
        (void)fflush(stderr);
    }
    return cli_stop_asked == 0;
}

int cli_rehearse(int argc, char **argv)
{
    const char *server = NULL, *reviewers_text = NULL, *looks_text = NULL, *seed_text = NULL;
    long long reviewers = 20, looks = 0, seed = 1;
    int rest;
    bool help;
    const struct cli_option options[] = {{"server", &server, NULL, true},
                                         {"reviewers", &reviewers_text, NULL, false},
                                         {"looks", &looks_text, NULL, false},
                                         {"seed", &seed_text, NULL, false},
                                         {NULL, NULL, NULL, false}};
    if (!cli_options_read(argc, argv, options, &rest, &help))
        return cli_usage("rehearse", help);
    if (!cli_integer_read("reviewers", reviewers_text, 1, 10000, &reviewers) ||
        !cli_integer_read("looks", looks_text, 0, 1000000, &looks) ||
        !cli_integer_read("seed", seed_text, 0, 1LL << 53, &seed))
        return CLI_USAGE;
    bool on_terminal = isatty(STDERR_FILENO) == 1;
    const struct rehearse_options what = {.server = server,
                                          .reviewers = (unsigned)reviewers,
                                          .looks = (unsigned)looks,
                                          .seed = (uint64_t)seed,
                                          .threads = 4,
                                          .progress = show,
                                          .context = &on_terminal};
    struct base_error error = {0};
    struct rehearse_totals totals = {0};
    cli_signals_catch();
    bool ok = rehearse_run(&what, &totals, &error);
    if (on_terminal)
        (void)fputc('\n', stderr);
    (void)printf("%" PRIu64 " rehearsal reviewers sent %" PRIu64 " reviews with %" PRIu64
                 " marks in %.1f s.\n",
                 totals.people, totals.reviews, totals.marks, totals.seconds);
    return ok ? CLI_DONE : cli_fail(&error);
}
