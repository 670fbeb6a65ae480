#include "read.h"

#include "ebbmark/text.h"

#include <assert.h>
#include <fcntl.h>
#include <math.h>
#include <stddef.h>
#include <stdlib.h>
#include <string.h>
#include <strings.h>
#include <unistd.h>

/* The columns that a catalogue may have, where each goes, and what it may hold. */
static const struct {
    const char *name;
    size_t place;
    double low, high; /* both allowed but where `open` says otherwise */
    bool low_open, high_open;
} properties[] = {
    {"ra", offsetof(struct lightcurve_star, ra_deg), 0.0, 360.0, false, true},
    {"dec", offsetof(struct lightcurve_star, dec_deg), -90.0, 90.0, false, false},
    {"magnitude", offsetof(struct lightcurve_star, magnitude), -100.0, 100.0, false, false},
    {"temperature", offsetof(struct lightcurve_star, temperature_k), 0.0, 1e9, true, false},
    {"radius", offsetof(struct lightcurve_star, radius_rsun), 0.0, 1e6, true, false},
    {"mass", offsetof(struct lightcurve_star, mass_msun), 0.0, 1e6, true, false}};
#define PROPERTIES (sizeof properties / sizeof properties[0])

/* A star with the line it came from, for telling where a name stands twice. */
struct row {
    struct lightcurve_star star;
    size_t line;
};

struct rows {
    struct row *list;
    size_t count, room;
};

struct plan {
    int name;             /* column of the name */
    int from[PROPERTIES]; /* column of each property, or -1 */
};

static bool plan_columns(const struct lightcurve_csv *csv, struct plan *plan,
                         struct base_error *error)
{
    char name[LIGHTCURVE_COLUMN_SIZE], unit[LIGHTCURVE_COLUMN_SIZE];
    int star = -1, named = -1;
    for (size_t p = 0; p < PROPERTIES; p++)
        plan->from[p] = -1;
    for (size_t i = csv->count; i-- > 0;) { /* backwards, so that the first of equals is kept */
        lightcurve_csv_name(csv->fields[i], name, unit);
        if (strcasecmp(name, "star") == 0)
            star = (int)i;
        else if (strcasecmp(name, "name") == 0)
            named = (int)i;
        for (size_t p = 0; p < PROPERTIES; p++)
            if (strcasecmp(name, properties[p].name) == 0)
                plan->from[p] = (int)i;
    }
    plan->name = star >= 0 ? star : named;
    if (plan->name < 0)
        return base_fail(error, BASE_INVALID,
                         "The catalogue has no column named \"star\" or \"name\".");
    return true;
}

static bool read_property(const struct lightcurve_csv *csv, const struct plan *plan, size_t p,
                          struct lightcurve_star *star, struct base_error *error)
{
    char quoted[LIGHTCURVE_QUOTE_SIZE];
    double value = NAN;
    if (plan->from[p] >= 0) {
        struct lightcurve_csv_field field = csv->fields[plan->from[p]];
        (void)lightcurve_quote(quoted, field.text, field.length);
        if (!lightcurve_csv_number(field, &value))
            return base_fail(error, BASE_INVALID, "Line %zu: the %s \"%s\" is not a number.",
                             csv->line, properties[p].name, quoted);
        bool low = properties[p].low_open ? value <= properties[p].low : value < properties[p].low;
        bool high =
            properties[p].high_open ? value >= properties[p].high : value > properties[p].high;
        if (low || high)
            return base_fail(error, BASE_INVALID, "Line %zu: the %s \"%s\" is outside of %g to %g.",
                             csv->line, properties[p].name, quoted, properties[p].low,
                             properties[p].high);
    }
    memcpy((char *)star + properties[p].place, &value, sizeof value);
    return true;
}

static bool read_row(const struct lightcurve_csv *csv, const struct plan *plan, struct row *row,
                     struct base_error *error)
{
    char quoted[LIGHTCURVE_QUOTE_SIZE];
    struct lightcurve_csv_field name = csv->fields[plan->name];
    *row = (struct row){.line = csv->line};
    bool fit = name.length > 0 && name.length < LIGHTCURVE_NAME_SIZE &&
               base_text_is_utf8(name.text, name.length);
    if (!fit)
        return base_fail(error, BASE_INVALID,
                         "Line %zu: the star's name \"%s\" is empty, longer than %d bytes or not "
                         "UTF-8.",
                         csv->line, lightcurve_quote(quoted, name.text, name.length),
                         LIGHTCURVE_NAME_SIZE - 1);
    memcpy(row->star.name, name.text, name.length);
    for (size_t p = 0; p < PROPERTIES; p++)
        if (!read_property(csv, plan, p, &row->star, error))
            return false;
    return true;
}

/* The place of the next row, NULL with `error` when there is no room for it. */
static struct row *rows_next(struct rows *rows, struct base_error *error)
{
    if (rows->count < rows->room)
        return &rows->list[rows->count];
    if (rows->count == LIGHTCURVE_CATALOGUE_ROWS_MAX) {
        (void)base_fail(error, BASE_TOO_LARGE, "The catalogue has more than %d stars, the limit.",
                        LIGHTCURVE_CATALOGUE_ROWS_MAX);
        return NULL;
    }
    size_t room = rows->room == 0 ? 256 : rows->room * 2;
    if (room > LIGHTCURVE_CATALOGUE_ROWS_MAX)
        room = LIGHTCURVE_CATALOGUE_ROWS_MAX;
    struct row *list = realloc(rows->list, room * sizeof *list);
    if (list == NULL) {
        (void)base_fail(error, BASE_MEMORY, "There is not enough memory to read the catalogue.");
        return NULL;
    }
    rows->list = list;
    rows->room = room;
    return &list[rows->count];
}

static bool read_rows(struct lightcurve_csv *csv, const struct plan *plan, struct rows *rows,
                      struct base_error *error)
{
    bool found = true;
    for (;;) {
        if (!lightcurve_csv_next(csv, &found, error))
            return false;
        if (!found)
            return true;
        struct row *row = rows_next(rows, error);
        if (row == NULL || !read_row(csv, plan, row, error))
            return false;
        rows->count++;
    }
}

static int by_name_and_line(const void *a, const void *b)
{
    const struct row *left = a, *right = b;
    int order = strcmp(left->star.name, right->star.name);
    return order != 0 ? order : (left->line > right->line) - (left->line < right->line);
}

/* Sort the rows and hand their stars over. */
static bool finish(struct rows *rows, struct lightcurve_catalogue *out, struct base_error *error)
{
    char quoted[LIGHTCURVE_QUOTE_SIZE];
    if (rows->count == 0)
        return base_fail(error, BASE_INVALID, "The catalogue holds no stars.");
    qsort(rows->list, rows->count, sizeof *rows->list, by_name_and_line);
    for (size_t i = 1; i < rows->count; i++) {
        const struct row *row = &rows->list[i];
        if (strcmp(row->star.name, row[-1].star.name) == 0)
            return base_fail(error, BASE_INVALID,
                             "Line %zu: the star \"%s\" stands in the catalogue on line %zu "
                             "already.",
                             row->line,
                             lightcurve_quote(quoted, row->star.name, strlen(row->star.name)),
                             row[-1].line);
    }
    out->stars = calloc(rows->count, sizeof *out->stars);
    if (out->stars == NULL)
        return base_fail(error, BASE_MEMORY, "There is not enough memory to read the catalogue.");
    for (size_t i = 0; i < rows->count; i++)
        out->stars[i] = rows->list[i].star;
    out->count = rows->count;
    return true;
}

static bool read_csv(const char *data, size_t size, struct lightcurve_catalogue *out,
                     struct base_error *error)
{
    struct lightcurve_csv csv = {0};
    struct rows rows = {0};
    struct plan plan = {0};
    bool ok = lightcurve_csv_open(&csv, data, size, error) && plan_columns(&csv, &plan, error) &&
              read_rows(&csv, &plan, &rows, error) && finish(&rows, out, error);
    free(rows.list);
    lightcurve_csv_close(&csv);
    return ok;
}

bool lightcurve_catalogue_read(const char *path, struct lightcurve_catalogue *out,
                               struct base_error *error)
{
    assert(path != NULL && out != NULL);
    bool ok = false;
    int fd = -1;
    uint64_t size = 0;
    unsigned char *data = NULL, *unpacked = NULL;
    size_t length = 0, unpacked_length = 0;
    *out = (struct lightcurve_catalogue){0};
    if (!lightcurve_file_open(AT_FDCWD, path, true, path, &fd, &size, error) ||
        !lightcurve_file_read(fd, size, path, &data, &length, error))
        goto end;
    if (!lightcurve_gzip_is(data, length))
        ok = read_csv((const char *)data, length, out, error);
    else
        ok = lightcurve_gzip_unpack(data, length, &unpacked, &unpacked_length, error) &&
             read_csv((const char *)unpacked, unpacked_length, out, error);
end:
    free(unpacked);
    free(data);
    if (fd >= 0)
        (void)close(fd);
    return ok;
}

void lightcurve_catalogue_free(struct lightcurve_catalogue *catalogue)
{
    if (catalogue == NULL)
        return;
    free(catalogue->stars);
    *catalogue = (struct lightcurve_catalogue){0};
}

static int name_against_star(const void *name, const void *star)
{
    return strcmp(name, ((const struct lightcurve_star *)star)->name);
}

const struct lightcurve_star *
lightcurve_catalogue_find(const struct lightcurve_catalogue *catalogue, const char *name)
{
    assert(catalogue != NULL && name != NULL);
    if (catalogue->count == 0)
        return NULL;
    return bsearch(name, catalogue->stars, catalogue->count, sizeof *catalogue->stars,
                   name_against_star);
}
