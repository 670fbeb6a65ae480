#include "cli.h"

#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

struct load_view {
    bool on_terminal;
    bool line_open; /* a progress line stands without its newline */
};

/* "1 h 02 min", "3 min 20 s", "12 s" */
static void write_left(char *out, size_t size, double seconds)
{
    if (!isfinite(seconds))
        (void)snprintf(out, size, "time left unknown");
    else if (seconds >= 3600.0)
        (void)snprintf(out, size, "%.0f h %02.0f min left", floor(seconds / 3600.0),
                       floor(fmod(seconds, 3600.0) / 60.0));
    else if (seconds >= 60.0)
        (void)snprintf(out, size, "%.0f min %02.0f s left", floor(seconds / 60.0),
                       floor(fmod(seconds, 60.0)));
    else
        (void)snprintf(out, size, "%.0f s left", ceil(seconds));
}

static bool show(void *context, const struct campaign_load_progress *at)
{
    struct load_view *view = context;
    if (view->on_terminal) {
        char left[64];
        write_left(left, sizeof left, at->seconds_left);
        double speed = isfinite(at->points_per_second) ? at->points_per_second : 0.0;
        (void)fprintf(stderr,
                      "\r%" PRIu64 " of %" PRIu64 " files  %" PRIu64
                      " stars  %.3g points/s  %s   \x1b[K",
                      at->files_done, at->files_total, at->stars, speed, left);
        (void)fflush(stderr);
        view->line_open = true;
    }
    return cli_stop_asked == 0;
}

static void close_line(struct load_view *view)
{
    if (view->line_open)
        (void)fputc('\n', stderr);
    view->line_open = false;
}

static void tell_refused(void *context, const char *label, const char *reason)
{
    close_line(context);
    (void)fprintf(stderr, "refused  %s: %s\n", label, reason);
}

static int load(const char *database, const struct campaign_load_options *what)
{
    struct campaign_load_options options = *what;
    struct base_error error = {0};
    struct cli_campaign opened;
    struct load_view view = {.on_terminal = isatty(STDERR_FILENO) == 1};
    struct campaign_load_progress result = {0};
    options.progress = show;
    options.refused = tell_refused;
    options.context = &view;
    if (!cli_campaign_open(&opened, database, false, &error))
        return cli_fail(&error);
    cli_signals_catch();
    bool ok = campaign_load(opened.campaign, &options, &result, &error);
    close_line(&view);
    cli_campaign_close(&opened);
    if (!ok) {
        if (error.kind == BASE_CANCELLED || error.kind == BASE_DISK_FULL)
            (void)fprintf(stderr, "The batch is kept as far as it came; the same command goes on "
                                  "with it.\n");
        return cli_fail(&error);
    }
    (void)printf("Batch %s: %" PRIu64 " files loaded, %" PRIu64 " loaded before, %" PRIu64
                 " refused; %" PRIu64 " stars, %" PRIu64 " points in %.1f s.\n",
                 options.batch, result.files_loaded, result.files_repeated, result.files_refused,
                 result.stars, result.points, result.seconds);
    return result.files_refused > 0 ? CLI_PARTLY : CLI_DONE;
}

/* Copy a column name into the mapping; false (said) when it is too long. */
static bool take_column(char *out, size_t size, const char *option, const char *name)
{
    if (name == NULL)
        return true;
    if (strlen(name) < size) {
        memcpy(out, name, strlen(name) + 1);
        return true;
    }
    (void)fprintf(stderr, "ebbmark: --%s takes a column name of at most %zu bytes.\n", option,
                  size - 1);
    return false;
}

int cli_load(int argc, char **argv)
{
    const char *database = NULL, *batch = NULL, *stars = NULL;
    const char *time = NULL, *flux = NULL, *error = NULL, *quality = NULL, *star = NULL;
    int rest;
    bool help;
    const struct cli_option options[] = {{"database", &database, NULL, true},
                                         {"batch", &batch, NULL, true},
                                         {"stars", &stars, NULL, false},
                                         {"time", &time, NULL, false},
                                         {"flux", &flux, NULL, false},
                                         {"error", &error, NULL, false},
                                         {"quality", &quality, NULL, false},
                                         {"star", &star, NULL, false},
                                         {NULL, NULL, NULL, false}};
    if (!cli_options_read(argc, argv, options, &rest, &help))
        return cli_usage("load", help);
    struct campaign_load_options what = {.batch = batch,
                                         .paths = (const char *const *)(argv + rest),
                                         .path_count = (size_t)(argc - rest),
                                         .catalogue = stars};
    if (rest == argc) {
        (void)fprintf(stderr, "ebbmark: name at least one file, folder or archive to load.\n");
        return CLI_USAGE;
    }
    struct lightcurve_mapping *mapping = &what.mapping;
    if (!take_column(mapping->time, sizeof mapping->time, "time", time) ||
        !take_column(mapping->flux, sizeof mapping->flux, "flux", flux) ||
        !take_column(mapping->error, sizeof mapping->error, "error", error) ||
        !take_column(mapping->quality, sizeof mapping->quality, "quality", quality) ||
        !take_column(mapping->star, sizeof mapping->star, "star", star))
        return CLI_USAGE;
    return load(database, &what);
}
