#include "cli.h"

#include <stdint.h>
#include <stdio.h>

#include "ebbmark/invent.h"

int cli_invent(int argc, char **argv)
{
    const char *output = NULL, *seed_text = NULL;
    long long seed = INVENT_SEED_DEFAULT;
    int rest;
    bool help;
    const struct cli_option options[] = {{"output", &output, NULL, true},
                                         {"seed", &seed_text, NULL, false},
                                         {NULL, NULL, NULL, false}};
    if (!cli_options_read(argc, argv, options, &rest, &help) ||
        !cli_integer_read("seed", seed_text, 0, INT64_MAX, &seed))
        return cli_usage("invent", help);
    struct base_error error = {0};
    if (!campaign_invent(output, (uint64_t)seed, &error))
        return cli_fail(&error);
    (void)printf("The invented survey of %d stars is in %s; its README.md says how it was made.\n",
                 INVENT_STARS, output);
    return CLI_DONE;
}
