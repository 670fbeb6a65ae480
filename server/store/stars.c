#include "db.h"

#define STAR                                                                                       \
    "SELECT s.id, s.name, s.ra_deg, s.dec_deg, s.magnitude, s.temperature_k, s.radius_rsun,"       \
    " s.mass_msun, (SELECT count(*) FROM light_curve l WHERE l.star = s.id),"                      \
    " (SELECT count(*) FROM light_curve l JOIN segment g ON g.light_curve = l.id"                  \
    " WHERE l.star = s.id), (SELECT ifnull(sum(g.looks), 0) FROM light_curve l"                    \
    " JOIN segment g ON g.light_curve = l.id WHERE l.star = s.id) FROM star s "

static bool fill_star(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_star *star = item;
    *star = (struct store_star){.id = sqlite3_column_int64(row, 0),
                                .properties = {.name = db_text(row, 1, arena),
                                               .ra_deg = db_real(row, 2),
                                               .dec_deg = db_real(row, 3),
                                               .magnitude = db_real(row, 4),
                                               .temperature_k = db_real(row, 5),
                                               .radius_rsun = db_real(row, 6),
                                               .mass_msun = db_real(row, 7)},
                                .light_curves = sqlite3_column_int64(row, 8),
                                .segments = sqlite3_column_int64(row, 9),
                                .reviews = sqlite3_column_int64(row, 10)};
    return star->properties.name != NULL;
}

bool store_star_by_name(struct store *store, struct base_arena *arena, const char *name,
                        struct store_star *out, struct base_error *error)
{
    return db_row(store, arena, fill_star, out, "There is no star of that name.", error,
                  STAR "WHERE s.name = ?", "t", name);
}

bool store_stars_list(struct store *store, struct base_arena *arena, int64_t after, size_t limit,
                      struct store_star **out, size_t *count, struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_star, out, count, error,
                   STAR "WHERE s.id > ? ORDER BY s.id LIMIT ?", "ii", after, (int64_t)limit);
}

#define LIGHT_CURVE                                                                                \
    "SELECT l.id, l.star, l.batch, s.name, l.time_reference, l.median_flux, l.cadence,"            \
    " l.noise_point, l.noise_1h, l.noise_3h, l.noise_6h, l.noise_13h, l.starts, l.ends, l.count"   \
    " FROM light_curve l JOIN star s ON s.id = l.star "

static bool fill_light_curve(sqlite3_stmt *row, struct base_arena *arena, void *item)
{
    struct store_light_curve *curve = item;
    *curve = (struct store_light_curve){
        .id = sqlite3_column_int64(row, 0),
        .star = sqlite3_column_int64(row, 1),
        .batch = sqlite3_column_int64(row, 2),
        .star_name = db_text(row, 3, arena),
        .time_reference = db_text(row, 4, arena),
        .median_flux = db_real(row, 5),
        .cadence_d = db_real(row, 6),
        .noise_point = db_real(row, 7),
        .noise_window = {db_real(row, 8), db_real(row, 9), db_real(row, 10), db_real(row, 11)},
        .starts_d = db_real(row, 12),
        .ends_d = db_real(row, 13),
        .count = (size_t)sqlite3_column_int64(row, 14)};
    return curve->star_name != NULL && curve->time_reference != NULL;
}

bool store_light_curves_of_star(struct store *store, struct base_arena *arena, int64_t star,
                                struct store_light_curve **out, size_t *count,
                                struct base_error *error)
{
    return db_rows(store, arena, sizeof **out, fill_light_curve, out, count, error,
                   LIGHT_CURVE "WHERE l.star = ? ORDER BY l.id", "i", star);
}

bool store_light_curve_read(struct store *store, struct base_arena *arena, int64_t light_curve,
                            struct store_light_curve *out, struct base_error *error)
{
    return db_row(store, arena, fill_light_curve, out, "There is no such light curve.", error,
                  LIGHT_CURVE "WHERE l.id = ?", "i", light_curve);
}
