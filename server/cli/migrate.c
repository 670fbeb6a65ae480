#include "cli.h"

#include <stdio.h>

int cli_migrate(int argc, char **argv)
{
    const char *database = NULL;
    int rest;
    bool help;
    const struct cli_option options[] = {{"database", &database, NULL, true},
                                         {NULL, NULL, NULL, false}};
    if (!cli_options_read(argc, argv, options, &rest, &help))
        return cli_usage("migrate", help);
    struct base_error error = {0};
    struct store *store = NULL;
    const struct store_options how = {.readers = 1, .must_exist = true};
    if (!store_open(database, &how, &store, &error))
        return cli_fail(&error);
    (void)printf("%s is at version %d, the newest this program knows.\n", database,
                 store_version(store));
    store_close(store);
    return CLI_DONE;
}
