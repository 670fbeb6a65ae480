/* Bringing a database forward. */
#ifndef STORE_MIGRATE_H
#define STORE_MIGRATE_H

#include "db.h"
#include "migrations.h"

/* Is the open database empty, or ours and not newer than this program? Its version, 0 when empty.
 * BASE_INVALID otherwise. */
bool migrate_identify(struct db *db, const char *path, int *version, struct base_error *error);

/* The same of the database that the writer has open; keeps its version. */
bool migrate_check(struct store *store, struct base_error *error);

/* Apply the steps that are missing (ended by version 0), each in one transaction after a verified
 * backup beside the database (FILE.before-NNNN; none for a new database). */
bool migrate_forward(struct store *store, const struct store_migration *steps,
                     struct base_error *error);

#endif
