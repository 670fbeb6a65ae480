#include "cli.h"

#include <errno.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/text.h"

#define OPTIONS_MAX 24

int cli_usage(const char *command, bool help)
{
    FILE *out = help ? stdout : stderr;
    for (const struct cli_command *at = cli_commands; at->name != NULL; at++)
        if (strcmp(at->name, command) == 0)
            (void)fprintf(out, "%s\nUsage: ebbmark %s %s\n", at->sentence, at->name, at->usage);
    return help ? CLI_DONE : CLI_USAGE;
}

/* Say which required option is missing; true when none is. */
static bool required_are_there(const struct cli_option *options)
{
    for (const struct cli_option *at = options; at->name != NULL; at++)
        if (at->required && at->value != NULL && *at->value == NULL) {
            (void)fprintf(stderr, "ebbmark: --%s is missing.\n", at->name);
            return false;
        }
    return true;
}

bool cli_options_read(int argc, char **argv, const struct cli_option *options, int *rest,
                      bool *help)
{
    struct option longs[OPTIONS_MAX + 2] = {{0}};
    int count = 0;
    for (; count < OPTIONS_MAX && options[count].name != NULL; count++)
        longs[count] = (struct option){
            options[count].name, options[count].value != NULL ? required_argument : no_argument,
            NULL, 256 + count};
    longs[count] = (struct option){"help", no_argument, NULL, 'h'};
    *help = false;
    optind = 1;
    for (int got; (got = getopt_long(argc, argv, "h", longs, NULL)) != -1;) {
        if (got == 'h') {
            *help = true;
            return false;
        }
        if (got < 256)
            return false; /* getopt has printed what is wrong */
        const struct cli_option *option = &options[got - 256];
        if (option->value != NULL)
            *option->value = optarg;
        else
            *option->flag = true;
    }
    *rest = optind;
    return required_are_there(options);
}

bool cli_integer_read(const char *name, const char *text, long long least, long long most,
                      long long *out)
{
    if (text == NULL)
        return true;
    char *end = NULL;
    errno = 0;
    long long value = strtoll(text, &end, 10);
    if (end == text || *end != '\0' || errno != 0 || value < least || value > most) {
        (void)fprintf(stderr, "ebbmark: --%s takes a whole number from %lld to %lld, not '%s'.\n",
                      name, least, most, text);
        return false;
    }
    *out = value;
    return true;
}

bool cli_real_read(const char *name, const char *text, double least, double most, double *out)
{
    if (text == NULL)
        return true;
    double value = 0.0;
    if (!base_text_read_number(text, &value) || !(value >= least && value <= most)) {
        (void)fprintf(stderr, "ebbmark: --%s takes a number from %g to %g, not '%s'.\n", name,
                      least, most, text);
        return false;
    }
    *out = value;
    return true;
}
