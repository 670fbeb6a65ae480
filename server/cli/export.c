#include "cli.h"

#include <errno.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

#include "ebbmark/tables.h"

static bool to_file(void *context, const void *data, size_t size, struct base_error *error)
{
    return fwrite(data, 1, size, context) == size ||
           base_fail_errno(error, errno, "Writing the table");
}

/* Write through a file beside the one asked for, so that a table that failed half way is not taken
 * for a whole one. */
static bool write_table(struct campaign *campaign, enum campaign_table table, int64_t run,
                        enum export_format format, const char *path, struct base_error *error)
{
    char part[4096];
    int length = snprintf(part, sizeof part, "%s.part", path != NULL ? path : "");
    if (length < 0 || (size_t)length >= sizeof part)
        return base_fail(error, BASE_INVALID, "The output's path is too long.");
    FILE *out = path != NULL ? fopen(part, "wb") : stdout;
    if (out == NULL)
        return base_fail_errno(error, errno, "Opening %s", part);
    bool ok = campaign_table_write(campaign, table, run, format, to_file, out, error);
    if (ok && (fflush(out) != 0 || (path != NULL && fsync(fileno(out)) != 0)))
        ok = base_fail_errno(error, errno, "Writing the table");
    if (path != NULL) {
        (void)fclose(out);
        if (ok && rename(part, path) != 0)
            ok = base_fail_errno(error, errno, "Putting the table at %s", path);
        if (!ok)
            (void)unlink(part);
    }
    return ok;
}

int cli_export(int argc, char **argv)
{
    const char *database = NULL, *table_name = NULL, *format_name = NULL;
    const char *run_text = NULL, *output = NULL;
    long long run = 0;
    int rest;
    bool help;
    enum campaign_table table;
    enum export_format format;
    const struct cli_option options[] = {
        {"database", &database, NULL, true},  {"table", &table_name, NULL, true},
        {"format", &format_name, NULL, true}, {"run", &run_text, NULL, false},
        {"output", &output, NULL, false},     {NULL, NULL, NULL, false}};
    if (!cli_options_read(argc, argv, options, &rest, &help))
        return cli_usage("export", help);
    if (!campaign_table_read(table_name, &table)) {
        (void)fprintf(stderr, "ebbmark: there is no table '%s'.\n", table_name);
        return cli_usage("export", false);
    }
    if (!export_format_read(format_name, &format)) {
        (void)fprintf(stderr, "ebbmark: there is no format '%s'.\n", format_name);
        return cli_usage("export", false);
    }
    if (!cli_integer_read("run", run_text, 1, 1LL << 53, &run))
        return CLI_USAGE;
    struct base_error error = {0};
    struct cli_campaign opened;
    if (!cli_campaign_open(&opened, database, true, &error))
        return cli_fail(&error);
    bool ok = write_table(opened.campaign, table, run, format, output, &error);
    cli_campaign_close(&opened);
    return ok ? CLI_DONE : cli_fail(&error);
}
