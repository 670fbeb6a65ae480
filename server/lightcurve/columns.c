#include "read.h"

#include <assert.h>
#include <ctype.h>
#include <stdio.h>
#include <string.h>
#include <strings.h>

static int find(const char (*names)[LIGHTCURVE_COLUMN_SIZE], size_t count, const char *name)
{
    for (size_t i = 0; i < count; i++)
        if (strcasecmp(names[i], name) == 0)
            return (int)i;
    return -1;
}

/* ERR, SIGMA or UNCERT anywhere, or E_ in front, mark an error column (common practice). */
static bool is_error_name(const char *name)
{
    return strcasestr(name, "ERR") != NULL || strcasestr(name, "SIGMA") != NULL ||
           strcasestr(name, "UNCERT") != NULL || strncasecmp(name, "E_", 2) == 0;
}

static bool ends_in_flux(const char *name)
{
    size_t length = strlen(name);
    return length >= 4 && strcasecmp(name + length - 4, "FLUX") == 0;
}

static int default_flux(const char (*names)[LIGHTCURVE_COLUMN_SIZE], const bool *usable,
                        size_t count)
{
    int best = -1;
    for (size_t i = 0; i < count; i++)
        if (ends_in_flux(names[i]) && !is_error_name(names[i]) && (usable == NULL || usable[i]) &&
            (best < 0 || strlen(names[i]) > strlen(names[best])))
            best = (int)i;
    return best;
}

/* A column that may be left out. `wanted` is the mapping's name: empty takes `by_default` if it is
 * there, "-" takes none, and any other must be there. */
static bool choose_optional(const char (*names)[LIGHTCURVE_COLUMN_SIZE], size_t count,
                            const char *wanted, const char *by_default, const char *what, int *out,
                            struct base_error *error)
{
    *out = -1;
    if (strcmp(wanted, "-") == 0)
        return true;
    if (wanted[0] == '\0') {
        *out = by_default == NULL ? -1 : find(names, count, by_default);
        return true;
    }
    *out = find(names, count, wanted);
    char quoted[LIGHTCURVE_QUOTE_SIZE];
    if (*out < 0)
        return base_fail(error, BASE_INVALID,
                         "No column is named \"%s\", which the mapping gives as the %s column.",
                         lightcurve_quote(quoted, wanted, strlen(wanted)), what);
    return true;
}

/* The columns' names for a sentence, as many as fit. */
static const char *list_names(const char (*names)[LIGHTCURVE_COLUMN_SIZE], size_t count,
                              char *buffer, size_t size)
{
    size_t used = 0;
    buffer[0] = '\0';
    for (size_t i = 0; i < count; i++) {
        char quoted[LIGHTCURVE_QUOTE_SIZE];
        (void)lightcurve_quote(quoted, names[i], strlen(names[i]));
        if (used + strlen(quoted) + 8 > size) {
            (void)snprintf(buffer + used, size - used, ", ...");
            break;
        }
        used += (size_t)snprintf(buffer + used, size - used, "%s%s", i == 0 ? "" : ", ", quoted);
    }
    return buffer;
}

bool lightcurve_columns_choose(const char (*names)[LIGHTCURVE_COLUMN_SIZE], const bool *usable,
                               size_t count, const struct lightcurve_mapping *mapping,
                               const char *star_default, struct lightcurve_columns *out,
                               struct base_error *error)
{
    assert(names != NULL && mapping != NULL);
    char list[200], quoted[LIGHTCURVE_QUOTE_SIZE];
    *out = (struct lightcurve_columns){-1, -1, -1, -1, -1};
    const char *time = mapping->time[0] != '\0' ? mapping->time : "TIME";
    out->time = find(names, count, time);
    if (out->time < 0)
        return base_fail(error, BASE_INVALID,
                         "No time column: none is named \"%s\" (the columns are %s).",
                         lightcurve_quote(quoted, time, strlen(time)),
                         list_names(names, count, list, sizeof list));
    if (mapping->flux[0] != '\0') {
        out->flux = find(names, count, mapping->flux);
    } else {
        out->flux = default_flux(names, usable, count);
        /* Better to say what is wrong with the only one than that there is none. */
        if (out->flux < 0)
            out->flux = default_flux(names, NULL, count);
    }
    if (out->flux < 0 && mapping->flux[0] != '\0')
        return base_fail(error, BASE_INVALID,
                         "No flux column: none is named \"%s\" (the columns are %s).",
                         lightcurve_quote(quoted, mapping->flux, strlen(mapping->flux)),
                         list_names(names, count, list, sizeof list));
    if (out->flux < 0)
        return base_fail(error, BASE_INVALID,
                         "No flux column: no name ends in FLUX (the columns are %s).",
                         list_names(names, count, list, sizeof list));
    char by_default[LIGHTCURVE_COLUMN_SIZE + 4];
    (void)snprintf(by_default, sizeof by_default, "%s_ERR", names[out->flux]);
    return choose_optional(names, count, mapping->error, by_default, "error", &out->error, error) &&
           choose_optional(names, count, mapping->quality, "QUALITY", "quality", &out->quality,
                           error) &&
           choose_optional(names, count, mapping->star, star_default, "star", &out->star, error);
}
