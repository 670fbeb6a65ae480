/* The first bytes of a database file, read before SQLite opens it. */
#ifndef STORE_HEADER_H
#define STORE_HEADER_H

#include <stdbool.h>

#include "ebbmark/error.h"

#define HEADER_APPLICATION_ID 0x45624d6b /* "EbMk": what SQLite's application_id says of ours */

enum header_kind {
    HEADER_NEW,    /* no file, or an empty one, or an empty database */
    HEADER_OURS,   /* says that it is ours */
    HEADER_UNKNOWN /* only its WAL can tell */
};

/* What is there. BASE_INVALID when it is not an Ebbmark database; such a file is not touched. Must
 * not run while this process has the file open in SQLite, since closing it here would end the locks
 * that SQLite holds. */
bool header_read(const char *path, enum header_kind *kind, struct base_error *error);

#endif
