/* The subcommands, once: main, help and usage are made from this table. */
#include "cli.h"

#include <stdio.h>

/* clang-format off */
const struct cli_command cli_commands[] = {
    {"serve", cli_serve,
     "--database FILE [--listen ADDR:PORT] [--tls-cert FILE --tls-key FILE] [--trusted-proxy CIDR]",
     "Serve the campaign to browsers and scripts."},
    {"load", cli_load, "--database FILE --batch NAME [--stars FILE] [--time COLUMN] [--flux COLUMN]\n"
     "           [--error COLUMN] [--quality COLUMN] [--star COLUMN] PATH...",
     "Load light curves (FITS, CSV, folders, .zip, .tar.gz) as a batch; go on with one that was stopped."},
    {"consensus", cli_consensus, "--database FILE", "Run the consensus over all reviews."},
    {"export", cli_export,
     "--database FILE --table candidates|reviewers|reviews --format csv|json|votable\n"
     "           [--run N] [--output FILE]",
     "Write a table."},
    {"reviews", cli_reviews, "--database FILE --add FILE", "Add marks made elsewhere (CSV)."},
    {"person", cli_person, "--database FILE --add HANDLE --role reviewer|science|admin | --list |\n"
     "           --token HANDLE [--days N]",
     "Add a person, list people, or make a token for scripts. A passphrase is read from standard input."},
    {"rehearse", cli_rehearse, "--server URL [--reviewers N] [--looks N] [--seed N]",
     "Have rehearsal reviewers work on a running server over HTTP."},
    {"invent", cli_invent, "--output FOLDER [--seed N]", "Make the invented Long Reach demo survey."},
    {"backup", cli_backup, "--database FILE --output FILE | --check FILE | --database FILE --restore FILE",
     "Copy a database and verify the copy, check one, or put one back; the server must be stopped."},
    {"migrate", cli_migrate, "--database FILE", "Bring a database up to this program's version."},
    {"version", cli_version, "", "Say which version this is."},
    {NULL, NULL, NULL, NULL}};
/* clang-format on */
