/* Whole copies of a database. */
#ifndef STORE_COPY_H
#define STORE_COPY_H

#include "db.h"

enum copy_where { COPY_IS_NEW, COPY_REPLACES };

/* Copy a database, which may be in use by this process, to a file that stands alone, and verify it:
 * read again from the disk, checked as a whole, with as many rows in each table. It appears under
 * its name whole or not at all. COPY_IS_NEW: BASE_CONFLICT when the name is taken. */
bool copy_verified(const char *from, const char *to, enum copy_where where,
                   struct base_error *error);

/* Read the whole open database and check its structure; `what` begins the sentence. BASE_CORRUPT.
 */
bool copy_is_sound(struct db *db, const char *what, struct base_error *error);

/* Make a renamed or new file's name survive power loss. */
bool copy_sync_folder(const char *path, struct base_error *error);

#endif
