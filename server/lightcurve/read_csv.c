#include "read.h"

#include <stdlib.h>
#include <string.h>

/* What is known after the header. */
struct csv_plan {
    struct lightcurve_columns columns;
    char reference[LIGHTCURVE_REFERENCE_SIZE];
    double unit_d; /* the time column's unit in days */
};

static bool plan_columns(const struct lightcurve_csv *csv, const struct lightcurve_mapping *mapping,
                         struct csv_plan *plan, struct base_error *error)
{
    bool ok = false;
    char unit[LIGHTCURVE_COLUMN_SIZE];
    char(*names)[LIGHTCURVE_COLUMN_SIZE] = calloc(csv->count, sizeof *names);
    if (names == NULL) {
        (void)base_fail(error, BASE_MEMORY, "There is not enough memory to read the CSV.");
        goto end;
    }
    for (size_t i = 0; i < csv->count; i++)
        lightcurve_csv_name(csv->fields[i], names[i], unit);
    if (!lightcurve_columns_choose((const char(*)[LIGHTCURVE_COLUMN_SIZE])names, NULL, csv->count,
                                   mapping, "star", &plan->columns, error))
        goto end;
    lightcurve_csv_name(csv->fields[plan->columns.time], names[0], unit);
    if (!lightcurve_reference_read(unit, "", plan->reference, &plan->unit_d, error))
        goto end;
    if (plan->unit_d == 0.0)
        plan->unit_d = 1.0;
    ok = true;
end:
    free(names);
    return ok;
}

/* The number in one column of this line; NAN when `column` is -1. */
static bool read_number(const struct lightcurve_csv *csv, int column, const char *what, double *out,
                        struct base_error *error)
{
    char quoted[LIGHTCURVE_QUOTE_SIZE];
    struct lightcurve_csv_field none = {"", 0};
    struct lightcurve_csv_field field = column < 0 ? none : csv->fields[column];
    if (!lightcurve_csv_number(field, out))
        return base_fail(error, BASE_INVALID, "Line %zu: the %s \"%s\" is not a number.", csv->line,
                         what, lightcurve_quote(quoted, field.text, field.length));
    return true;
}

/* Find the curve that this line belongs to; most lines go on with the last one's. */
static bool find_star(struct lightcurve_gather *gather, const struct lightcurve_csv *csv,
                      int column, size_t *index, struct base_error *error)
{
    struct lightcurve_csv_field field = csv->fields[column];
    if (gather->count > 0) {
        const char *last = gather->curves[*index].star.name;
        if (strlen(last) == field.length && memcmp(last, field.text, field.length) == 0)
            return true;
    }
    struct base_error inner = {0};
    if (lightcurve_gather_star(gather, field.text, field.length, index, &inner))
        return true;
    return base_fail(error, inner.kind, "Line %zu: %s", csv->line, inner.sentence);
}

static bool read_line(struct lightcurve_gather *gather, const struct lightcurve_csv *csv,
                      const struct csv_plan *plan, size_t *index, struct base_error *error)
{
    double time = 0.0, flux = 0.0, point_error = 0.0, quality = 0.0;
    const struct lightcurve_columns *columns = &plan->columns;
    if (columns->star >= 0 && !find_star(gather, csv, columns->star, index, error))
        return false;
    if (!read_number(csv, columns->time, "time", &time, error) ||
        !read_number(csv, columns->flux, "flux", &flux, error) ||
        !read_number(csv, columns->error, "flux error", &point_error, error) ||
        !read_number(csv, columns->quality, "quality", &quality, error))
        return false;
    return lightcurve_gather_point(gather, *index, time * plan->unit_d, flux, point_error,
                                   lightcurve_quality_of_number(quality), error);
}

bool lightcurve_read_csv(const char *star, const char *data, size_t size,
                         const struct lightcurve_mapping *mapping, struct lightcurve_reading *out,
                         struct base_error *error)
{
    bool ok = false;
    struct lightcurve_csv csv = {0};
    struct lightcurve_gather gather = {0};
    struct csv_plan plan = {0};
    size_t index = 0;
    bool found = true;
    if (!lightcurve_csv_open(&csv, data, size, error) || !plan_columns(&csv, mapping, &plan, error))
        goto end;
    lightcurve_gather_start(&gather, plan.columns.error >= 0, plan.columns.quality >= 0);
    if (plan.columns.star < 0 &&
        !lightcurve_gather_star(&gather, star, strlen(star), &index, error))
        goto end;
    for (;;) {
        if (!lightcurve_csv_next(&csv, &found, error))
            goto end;
        if (!found)
            break;
        if (!read_line(&gather, &csv, &plan, &index, error))
            goto end;
    }
    ok = lightcurve_gather_finish(&gather, plan.reference, out, error);
end:
    lightcurve_gather_free(&gather);
    lightcurve_csv_close(&csv);
    return ok;
}
