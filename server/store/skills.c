#include "runs.h"

#define SKILL                                                                                      \
    "SELECT k.person, p.handle, k.looks, k.marks, k.days_looked, k.hit, k.hit_low, k.hit_high,"    \
    " k.chance, k.chance_low, k.chance_high, k.weight FROM skill k"                                \
    " JOIN person p ON p.id = k.person "

/* Without an arena the handle is left out. */
static bool fill_skill(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_skill *skill = item;
    *skill = (struct store_skill){.person = sqlite3_column_int64(row, 0),
                                  .handle = arena != NULL ? db_text(row, 1, arena) : "",
                                  .looks = sqlite3_column_int64(row, 2),
                                  .marks = sqlite3_column_int64(row, 3),
                                  .days_looked = db_real(row, 4),
                                  .hit = db_real(row, 5),
                                  .hit_low = db_real(row, 6),
                                  .hit_high = db_real(row, 7),
                                  .chance = db_real(row, 8),
                                  .chance_low = db_real(row, 9),
                                  .chance_high = db_real(row, 10),
                                  .weight = db_real(row, 11)};
    return skill->handle != NULL;
}

bool store_skills_list(struct store *store, struct base_arena *arena, int64_t run,
                       struct store_skill **out, size_t *count, struct base_error *error)
{
    return runs_resolve(store, run, &run, error) &&
           db_rows(store, arena, sizeof **out, fill_skill, out, count, error,
                   SKILL "WHERE k.run = ? ORDER BY k.person", "i", run);
}

bool store_skill_read(struct store *store, int64_t person, struct store_skill *out,
                      struct base_error *error)
{
    int64_t run = 0;
    return runs_resolve(store, 0, &run, error) &&
           db_row(store, NULL, fill_skill, out, "No run knows this person's skill yet.", error,
                  SKILL "WHERE k.run = ? AND k.person = ?", "ii", run, person);
}
