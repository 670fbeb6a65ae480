/* Bringing a database forward. */
#ifndef STORE_MIGRATE_H
#define STORE_MIGRATE_H

#include "db.h"

/* Is it empty, or ours and not newer than this program? Reads the version. BASE_INVALID otherwise.
 */
bool migrate_check(struct store *store, struct base_error *error);

/* Apply what is missing, each step in one transaction after a verified backup beside the database
 * (FILE.before-NNNN; none for a new database). */
bool migrate_forward(struct store *store, struct base_error *error);

/* Copy the open database to a new file and verify it. */
bool copy_verified(struct store *store, const char *path, struct base_error *error);

#endif
