/* The lock beside a database: one process may use it at a time. */
#ifndef STORE_LOCK_H
#define STORE_LOCK_H

#include <stdbool.h>

#include "ebbmark/error.h"

struct lock {
    int fd;    /* -1: not held */
    bool made; /* the file was not there before */
};

/* Take FILE.lock and write our process id into it. BASE_CONFLICT names the process that has it. */
bool lock_take(const char *database, struct lock *lock, struct base_error *error);

/* Give it back. The file stays, so that nobody can hold one that was removed, unless `forget`. */
void lock_end(const char *database, struct lock *lock, bool forget);

/* Is what we hold still the file of that name? BASE_CONFLICT otherwise. */
bool lock_check(const char *database, const struct lock *lock, struct base_error *error);

#endif
