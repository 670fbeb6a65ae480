/* The schema's steps, carried inside the program; the array is made by embed-migrations.sh. */
#ifndef STORE_MIGRATIONS_H
#define STORE_MIGRATIONS_H

struct store_migration {
    int version; /* 1 and on, without a hole */
    const char *name;
    const char *sql;
};
extern const struct store_migration store_migrations[]; /* ended by version 0 */

#endif
