/*
 * What the subcommands share. Each subcommand is one file with one function that takes its own
 * arguments (argv[0] is the subcommand's name) and returns the exit status of api.md: 0 done, 1
 * failed with one sentence on stderr, 2 wrong usage, 3 done in part.
 */
#ifndef CLI_CLI_H
#define CLI_CLI_H

#include <getopt.h>
#include <signal.h>

#include "ebbmark/campaign.h"
#include "ebbmark/error.h"

enum cli_status { CLI_DONE = 0, CLI_FAILED = 1, CLI_USAGE = 2, CLI_PARTLY = 3 };

struct cli_command {
    const char *name;
    int (*run)(int argc, char **argv);
    const char *usage;    /* what follows the name */
    const char *sentence; /* what it does */
};

/* One option of a subcommand: its value is a text that is put at *value, or, with no value, *flag
 * is set. A repeated option's last value counts. */
struct cli_option {
    const char *name;
    const char **value;
    bool *flag;
    bool required;
};

/* Read options (ended by a NULL name); what is left over is argv[*rest …]. False: a usage problem
 * was printed, or --help was asked for and printed (*help). */
bool cli_options_read(int argc, char **argv, const struct cli_option *options, int *rest,
                      bool *help);

/* Read a whole number or a real option value in a range; prints the problem. NULL keeps *out. */
bool cli_integer_read(const char *name, const char *text, long long least, long long most,
                      long long *out);
bool cli_real_read(const char *name, const char *text, double least, double most, double *out);

/* Usage printed by name; returns CLI_USAGE, or CLI_DONE after --help. */
int cli_usage(const char *command, bool help);

/* Print "ebbmark: <sentence>" on stderr; returns CLI_FAILED. */
int cli_fail(const struct base_error *error);

/* An open database with a campaign over it and a worker pool of all processors. */
struct cli_campaign {
    struct store *store;
    struct base_pool *pool;
    struct campaign *campaign;
    struct base_log log;
};
bool cli_campaign_open(struct cli_campaign *opened, const char *database, bool must_exist,
                       struct base_error *error);
void cli_campaign_close(struct cli_campaign *opened);

/* Set by SIGINT and SIGTERM once cli_signals_catch was called. */
extern volatile sig_atomic_t cli_stop_asked;
void cli_signals_catch(void);

extern const struct cli_command cli_commands[]; /* ended by a NULL name */

int cli_backup(int argc, char **argv);
int cli_consensus(int argc, char **argv);
int cli_export(int argc, char **argv);
int cli_invent(int argc, char **argv);
int cli_load(int argc, char **argv);
int cli_migrate(int argc, char **argv);
int cli_person(int argc, char **argv);
int cli_rehearse(int argc, char **argv);
int cli_reviews(int argc, char **argv);
int cli_serve(int argc, char **argv);
int cli_version(int argc, char **argv);

#endif
