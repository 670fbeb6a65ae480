/* Which consensus run a question is about. */
#ifndef STORE_RUNS_H
#define STORE_RUNS_H

#include "db.h"

/* *run becomes the run that was asked for, the current one when 0 was, or 0 when there is no whole
 * run of that number. */
bool runs_resolve(struct store *store, int64_t asked, int64_t *run, struct base_error *error);

#endif
