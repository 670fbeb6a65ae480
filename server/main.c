/* Picks the subcommand. */
#include <gsl/gsl_errno.h>
#include <stdio.h>
#include <string.h>

#include "cli/cli.h"

static int help(FILE *out, int status)
{
    (void)fprintf(out, "Ebbmark hands star light curves to reviewers and makes a ranked list of "
                       "what they mark.\n\n");
    for (const struct cli_command *at = cli_commands; at->name != NULL; at++)
        (void)fprintf(out, "  ebbmark %-10s %s\n", at->name, at->sentence);
    (void)fprintf(out,
                  "\nOne database is one campaign. `ebbmark COMMAND --help` tells the rest.\n");
    return status;
}

int main(int argc, char **argv)
{
    /* GSL's own handler ends the program; ours look at what its functions return. */
    (void)gsl_set_error_handler_off();
    if (argc < 2)
        return help(stderr, CLI_USAGE);
    if (strcmp(argv[1], "--help") == 0 || strcmp(argv[1], "help") == 0)
        return help(stdout, CLI_DONE);
    for (const struct cli_command *at = cli_commands; at->name != NULL; at++)
        if (strcmp(at->name, argv[1]) == 0)
            return at->run(argc - 1, argv + 1);
    (void)fprintf(stderr, "ebbmark: there is no command '%s'.\n\n", argv[1]);
    return help(stderr, CLI_USAGE);
}
