#include "cli.h"

#include <stdio.h>

#define EBBMARK_VERSION "0.1.0"

int cli_version(int argc, char **argv)
{
    int rest;
    bool help;
    const struct cli_option options[] = {{NULL, NULL, NULL, false}};
    if (!cli_options_read(argc, argv, options, &rest, &help))
        return cli_usage("version", help);
    (void)printf("ebbmark %s (database version %d)\n", EBBMARK_VERSION, store_version_newest());
    return CLI_DONE;
}
