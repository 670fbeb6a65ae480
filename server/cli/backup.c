#include "cli.h"

#include <inttypes.h>
#include <stdio.h>

#include "ebbmark/clock.h"

static bool copy(const char *database, const char *output, struct base_error *error)
{
    struct store *store = NULL;
    const struct store_options how = {.readers = 1, .must_exist = true};
    if (!store_open(database, &how, &store, error))
        return false;
    bool ok = store_backup(store, output, error);
    store_close(store);
    if (ok)
        (void)printf("%s is a verified copy of %s.\n", output, database);
    return ok;
}

static bool check(const char *file, struct base_error *error)
{
    int version = 0;
    if (!store_backup_check(file, &version, error))
        return false;
    (void)printf("%s is sound, at version %d.\n", file, version);
    return true;
}

static bool restore(const char *database, const char *backup, struct base_error *error)
{
    bool replaced = false;
    int64_t now = base_clock_unix_ms();
    if (!store_restore(backup, database, now, &replaced, error))
        return false;
    (void)printf("%s is restored from %s.\n", database, backup);
    if (replaced)
        (void)printf("The database that was there is kept as %s.replaced-%" PRId64 ".\n", database,
                     now);
    return true;
}

int cli_backup(int argc, char **argv)
{
    const char *database = NULL, *output = NULL, *checked = NULL, *restored = NULL;
    int rest;
    bool help;
    const struct cli_option options[] = {{"database", &database, NULL, false},
                                         {"output", &output, NULL, false},
                                         {"check", &checked, NULL, false},
                                         {"restore", &restored, NULL, false},
                                         {NULL, NULL, NULL, false}};
    if (!cli_options_read(argc, argv, options, &rest, &help))
        return cli_usage("backup", help);
    if ((output != NULL) + (checked != NULL) + (restored != NULL) != 1 ||
        (checked == NULL && database == NULL)) {
        (void)fprintf(stderr, "ebbmark: give one of --output, --check and --restore, and the "
                              "database with the first and the last.\n");
        return cli_usage("backup", false);
    }
    struct base_error error = {0};
    bool ok = output != NULL    ? copy(database, output, &error)
              : checked != NULL ? check(checked, &error)
                                : restore(database, restored, &error);
    return ok ? CLI_DONE : cli_fail(&error);
}
