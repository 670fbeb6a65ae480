#include "fits_layout.h"

#include "ebbmark/text.h"

#include <assert.h>
#include <ctype.h>
#include <fitsio.h>
#include <inttypes.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#define CARD 80

/* The header of one unit while it is read. */
struct header {
    size_t card;       /* number of the card, from 0 */
    char name[9];      /* its keyword */
    char value[72];    /* its value as it stands, unquoted when it was a string */
    bool is_text;      /* the value was quoted */
    int64_t bits;      /* BITPIX */
    int64_t axes;      /* NAXIS */
    int64_t axis[2];   /* NAXIS1, NAXIS2 */
    uint64_t cells;    /* product of all NAXISn */
    bool cells_absurd; /* the product does not fit 64 bits */
    int64_t axes_seen, extra, groups, fields;
    bool misplaced;                  /* PCOUNT, GCOUNT or TFIELDS is not where a table has it */
    char kind[LIGHTCURVE_FITS_TEXT]; /* XTENSION; empty for the primary */
};

static bool key_is_fit(const char *key, const char *field, struct base_error *error)
{
    size_t length = strlen(key);
    bool fit = length <= 8;
    for (size_t i = 0; i < length; i++)
        fit = fit && (isupper((unsigned char)key[i]) || isdigit((unsigned char)key[i]) ||
                      key[i] == '-' || key[i] == '_');
    if (!fit)
        return base_fail_field(error, BASE_INVALID, field,
                               "A FITS keyword has at most 8 characters of A-Z, 0-9, - and _.");
    return true;
}

static struct lightcurve_fits_facts no_facts(void)
{
    return (struct lightcurve_fits_facts){.epoch = {NAN, NAN, NAN, NAN, NAN, NAN, NAN, NAN, NAN},
                                          .time_zero = NAN,
                                          .ra_deg = NAN,
                                          .dec_deg = NAN,
                                          .magnitude = NAN,
                                          .temperature_k = NAN,
                                          .radius_rsun = NAN};
}

bool lightcurve_fits_epoch_known(const struct lightcurve_fits_epoch *epoch)
{
    return isfinite(epoch->bjd) || isfinite(epoch->bjd_i) || isfinite(epoch->mjd) ||
           isfinite(epoch->mjd_i) || isfinite(epoch->jd) || isfinite(epoch->jd_i);
}

bool lightcurve_fits_open(struct lightcurve_fits_walk *walk, const unsigned char *data, size_t size,
                          const struct lightcurve_mapping *mapping, struct base_error *error)
{
    *walk = (struct lightcurve_fits_walk){
        .data = data, .size = size, .mapping = mapping, .primary = no_facts()};
    if (!key_is_fit(mapping->key_name, "key_name", error) ||
        !key_is_fit(mapping->key_ra, "key_ra", error) ||
        !key_is_fit(mapping->key_dec, "key_dec", error) ||
        !key_is_fit(mapping->key_magnitude, "key_magnitude", error) ||
        !key_is_fit(mapping->key_temperature, "key_temperature", error) ||
        !key_is_fit(mapping->key_radius, "key_radius", error))
        return false;
    walk->part.columns = calloc(LIGHTCURVE_FITS_COLUMNS_MAX, sizeof *walk->part.columns);
    if (walk->part.columns == NULL)
        return base_fail(error, BASE_MEMORY, "There is not enough memory to read the FITS header.");
    return true;
}

void lightcurve_fits_close(struct lightcurve_fits_walk *walk)
{
    free(walk->part.columns);
    *walk = (struct lightcurve_fits_walk){0};
}

/* Undo FITS quoting: 'it''s  ' gives it's. */
static void unquote(const char *quoted, char out[LIGHTCURVE_FITS_TEXT])
{
    size_t length = 0;
    for (const char *at = quoted + 1; *at != '\0' && length < LIGHTCURVE_FITS_TEXT - 1; at++) {
        if (*at == '\'') {
            if (at[1] != '\'')
                break;
            at++;
        }
        out[length++] = *at;
    }
    while (length > 0 && out[length - 1] == ' ')
        length--;
    out[length] = '\0';
}

/* Take one card apart. A card without a value leaves header->value empty. */
static void read_card(struct header *header, const unsigned char *bytes)
{
    char card[CARD + 1], value[FLEN_VALUE] = "", comment[FLEN_COMMENT] = "";
    int status = 0;
    memcpy(card, bytes, CARD);
    card[CARD] = '\0';
    size_t length = 8;
    while (length > 0 && card[length - 1] == ' ')
        length--;
    memcpy(header->name, card, length);
    header->name[length] = '\0';
    header->value[0] = '\0';
    header->is_text = false;
    if (memchr(card, '\0', CARD) != NULL || memcmp(card + 8, "= ", 2) != 0)
        return;
    if (fits_parse_value(card, value, comment, &status) != 0)
        return; /* no value that can be read: as if the card had none */
    header->is_text = value[0] == '\'';
    if (header->is_text)
        unquote(value, header->value);
    else
        (void)snprintf(header->value, sizeof header->value, "%s", value);
}

static bool value_whole(const struct header *header, int64_t *out)
{
    const char *at = header->value;
    bool negative = *at == '-';
    if (*at == '-' || *at == '+')
        at++;
    if (header->is_text || *at == '\0' || strlen(at) > 18)
        return false;
    int64_t value = 0;
    for (; *at != '\0'; at++) {
        if (*at < '0' || *at > '9')
            return false;
        value = value * 10 + (*at - '0');
    }
    *out = negative ? -value : value;
    return true;
}

/* A number, also one that was written as a string or with Fortran's D; NAN for anything else. */
static double value_number(const struct header *header)
{
    char text[sizeof header->value];
    double value;
    (void)snprintf(text, sizeof text, "%s", header->value);
    for (char *at = text; *at != '\0'; at++)
        if (*at == 'D' || *at == 'd')
            *at = 'E';
    return base_text_read_number(text, &value) && isfinite(value) ? value : NAN;
}

/* TFORMn: an optional repeat count and a letter. */
static void read_form(const char *text, struct lightcurve_fits_column *column)
{
    uint64_t repeat = 0;
    size_t digits = strspn(text, "0123456789");
    column->type = '\0';
    if (digits > 15)
        return;
    for (size_t i = 0; i < digits; i++)
        repeat = repeat * 10 + (uint64_t)(text[i] - '0');
    column->repeat = digits == 0 ? 1 : repeat;
    if (text[digits] != '\0' && strchr("LXBIJKAEDCMPQ", text[digits]) != NULL)
        column->type = text[digits];
}

/* Bytes that the column takes in a row (FITS 4.0, table 18). */
static uint64_t column_bytes(const struct lightcurve_fits_column *column)
{
    switch (column->type) {
    case 'X':
        return (column->repeat + 7) / 8;
    case 'I':
        return column->repeat * 2;
    case 'J':
    case 'E':
        return column->repeat * 4;
    case 'K':
    case 'D':
    case 'C':
    case 'P':
        return column->repeat * 8;
    case 'M':
    case 'Q':
        return column->repeat * 16;
    default:
        return column->repeat;
    }
}

/* The number that a keyword such as TTYPE12 ends in, 1 to 999; 0 when it is no such keyword. */
static size_t indexed(const char *name, const char *stem)
{
    size_t length = strlen(stem);
    if (strncmp(name, stem, length) != 0 || name[length] == '\0' || name[length] == '0')
        return 0;
    size_t number = 0;
    for (const char *at = name + length; *at != '\0'; at++) {
        if (*at < '0' || *at > '9' || number > 99)
            return 0;
        number = number * 10 + (size_t)(*at - '0');
    }
    return number;
}

static void read_column_card(const struct header *header, struct lightcurve_fits_column *columns)
{
    size_t number;
    if ((number = indexed(header->name, "TTYPE")) > 0)
        (void)snprintf(columns[number - 1].name, LIGHTCURVE_COLUMN_SIZE, "%s", header->value);
    else if ((number = indexed(header->name, "TUNIT")) > 0)
        (void)snprintf(columns[number - 1].unit, LIGHTCURVE_COLUMN_SIZE, "%s", header->value);
    else if ((number = indexed(header->name, "TFORM")) > 0)
        read_form(header->value, &columns[number - 1]);
    else if ((number = indexed(header->name, "TSCAL")) > 0 ||
             (number = indexed(header->name, "TZERO")) > 0)
        columns[number - 1].scaled = true;
}

static const char *or_default(const char *key, const char *by_default)
{
    return key[0] == '\0' ? by_default : key;
}

/* Keep the value when the card is one of those that matter. */
static void read_fact_card(const struct header *header, const struct lightcurve_mapping *mapping,
                           struct lightcurve_fits_facts *facts)
{
    const struct {
        const char *key;
        double *number;
        char *text;
    } wanted[] = {{"BJDREF", &facts->epoch.bjd, NULL},
                  {"BJDREFI", &facts->epoch.bjd_i, NULL},
                  {"BJDREFF", &facts->epoch.bjd_f, NULL},
                  {"MJDREF", &facts->epoch.mjd, NULL},
                  {"MJDREFI", &facts->epoch.mjd_i, NULL},
                  {"MJDREFF", &facts->epoch.mjd_f, NULL},
                  {"JDREF", &facts->epoch.jd, NULL},
                  {"JDREFI", &facts->epoch.jd_i, NULL},
                  {"JDREFF", &facts->epoch.jd_f, NULL},
                  {"TIMEZERO", &facts->time_zero, NULL},
                  {"TIMEOFFS", &facts->time_zero, NULL},
                  {"TIMESYS", NULL, facts->time_system},
                  {"TIMEREF", NULL, facts->time_frame},
                  {"TREFPOS", NULL, facts->time_frame},
                  {"TIMEUNIT", NULL, facts->time_unit},
                  {or_default(mapping->key_name, "OBJECT"), NULL, facts->star},
                  {or_default(mapping->key_ra, "RA_OBJ"), &facts->ra_deg, NULL},
                  {or_default(mapping->key_dec, "DEC_OBJ"), &facts->dec_deg, NULL},
                  {mapping->key_magnitude, &facts->magnitude, NULL},
                  {or_default(mapping->key_temperature, "TEFF"), &facts->temperature_k, NULL},
                  {or_default(mapping->key_radius, "RADIUS"), &facts->radius_rsun, NULL}};
    for (size_t i = 0; i < sizeof wanted / sizeof wanted[0]; i++) {
        if (strcmp(wanted[i].key, header->name) != 0)
            continue;
        if (wanted[i].number != NULL)
            *wanted[i].number = value_number(header);
        else
            (void)snprintf(wanted[i].text, LIGHTCURVE_FITS_TEXT, "%s", header->value);
    }
}

/* The keywords that lay the unit out. Those whose place the standard fixes are taken only there,
 * as cfitsio does; a value that is no whole number is a fault. */
static bool read_structure_card(struct header *header, struct base_error *error)
{
    int64_t *target = NULL;
    size_t axis = indexed(header->name, "NAXIS");
    if (header->card == 0) {
        if (strcmp(header->name, "XTENSION") == 0)
            (void)snprintf(header->kind, sizeof header->kind, "%s", header->value);
    } else if (header->card == 1 && strcmp(header->name, "BITPIX") == 0) {
        target = &header->bits;
    } else if (header->card == 2 && strcmp(header->name, "NAXIS") == 0) {
        target = &header->axes;
    } else if (axis > 0 && axis == header->card - 2 && (int64_t)axis <= header->axes) {
        int64_t length = 0;
        if (!value_whole(header, &length) || length < 0)
            return base_fail(error, BASE_INVALID, "The header's %s is not a size.", header->name);
        header->axes_seen++;
        if (axis <= 2)
            header->axis[axis - 1] = length;
        header->cells_absurd =
            header->cells_absurd ||
            __builtin_mul_overflow(header->cells, (uint64_t)length, &header->cells);
        return true;
    } else if (strcmp(header->name, "PCOUNT") == 0 && header->extra < 0) {
        target = &header->extra;
    } else if (strcmp(header->name, "GCOUNT") == 0 && header->groups < 0) {
        target = &header->groups;
    } else if (strcmp(header->name, "TFIELDS") == 0 && header->fields < 0) {
        target = &header->fields;
    }
    /* FITS 4.0, table 13: cards 6 to 8 of a table. cfitsio finds them nowhere else. */
    header->misplaced = header->misplaced || (target == &header->extra && header->card != 5) ||
                        (target == &header->groups && header->card != 6) ||
                        (target == &header->fields && header->card != 7);
    if (target != NULL && (!value_whole(header, target) || (*target < 0 && header->card != 1)))
        return base_fail(error, BASE_INVALID, "The header's %s is not a whole number.",
                         header->name);
    return true;
}

static bool fail_header_cut(const struct lightcurve_fits_walk *walk, struct base_error *error)
{
    return base_fail(error, BASE_INVALID,
                     "Truncated: the header of part %d of the FITS file does not end.",
                     walk->part.number);
}

/* Read the cards up to END and say where the data begin. */
static bool read_header(struct lightcurve_fits_walk *walk, struct header *header,
                        struct lightcurve_fits_facts *facts, size_t *data_at,
                        struct base_error *error)
{
    *header = (struct header){.cells = 1, .axes = -1, .extra = -1, .groups = -1, .fields = -1};
    for (size_t at = walk->at;; at += CARD, header->card++) {
        if (header->card == LIGHTCURVE_FITS_CARDS_MAX)
            return base_fail(error, BASE_TOO_LARGE, "A FITS header has more than %d cards.",
                             LIGHTCURVE_FITS_CARDS_MAX);
        if (walk->size - at < CARD)
            return fail_header_cut(walk, error);
        read_card(header, walk->data + at);
        if (strcmp(header->name, "END") == 0 && header->value[0] == '\0') {
            size_t cards = at + CARD - walk->at;
            size_t blocks = (cards + LIGHTCURVE_FITS_BLOCK - 1) / LIGHTCURVE_FITS_BLOCK;
            *data_at = walk->at + blocks * LIGHTCURVE_FITS_BLOCK;
            return *data_at <= walk->size || fail_header_cut(walk, error);
        }
        if (!read_structure_card(header, error))
            return false;
        read_column_card(header, walk->part.columns);
        read_fact_card(header, walk->mapping, facts);
    }
}

/* Bytes of the data that the header describes; false when they do not fit 64 bits. */
static bool data_bytes(const struct header *header, uint64_t *out)
{
    *out = 0;
    if (header->axes == 0)
        return true;
    uint64_t size_of_cell = (uint64_t)llabs(header->bits) / 8;
    uint64_t extra = header->extra < 0 ? 0 : (uint64_t)header->extra;
    uint64_t groups = header->groups < 0 ? 1 : (uint64_t)header->groups;
    return !header->cells_absurd && !__builtin_add_overflow(header->cells, extra, out) &&
           !__builtin_mul_overflow(*out, groups, out) &&
           !__builtin_mul_overflow(*out, size_of_cell, out);
}

static bool check_structure(const struct header *header, int number, struct base_error *error)
{
    bool known = header->bits == 8 || header->bits == 16 || header->bits == 32 ||
                 header->bits == 64 || header->bits == -32 || header->bits == -64;
    if (!known || header->axes < 0 || header->axes > 999 || header->axes_seen != header->axes)
        return base_fail(error, BASE_INVALID,
                         "Part %d of the FITS file lacks BITPIX, NAXIS or an axis length where the "
                         "standard puts it.",
                         number);
    if (number == 1 && header->axes > 0 && header->axis[0] == 0)
        return base_fail(error, BASE_INVALID,
                         "The FITS file is laid out in random groups, which are not read.");
    return true;
}

/* What must hold of a table before cfitsio may read it. */
static bool check_table(const struct header *header, const struct lightcurve_fits_part *part,
                        struct base_error *error)
{
    if (header->bits != 8 || header->axes != 2 || header->groups != 1 || header->extra < 0 ||
        header->fields < 0 || header->fields > LIGHTCURVE_FITS_COLUMNS_MAX || header->misplaced)
        return base_fail(error, BASE_INVALID,
                         "The header of the table in part %d contradicts the FITS standard.",
                         part->number);
    uint64_t sum = 0;
    for (size_t i = 0; i < part->column_count; i++) {
        if (part->columns[i].type == '\0')
            return base_fail(error, BASE_INVALID,
                             "Column %zu of the table in part %d has no TFORM that can be read.",
                             i + 1, part->number);
        sum += column_bytes(&part->columns[i]);
    }
    if (sum != part->row_bytes)
        return base_fail(error, BASE_INVALID,
                         "The columns of the table in part %d take %" PRIu64
                         " bytes a row, but its header states %" PRIu64 ".",
                         part->number, sum, part->row_bytes);
    return true;
}

/* The data must be there; the padding after the very last of them need not be. */
static bool check_size(const struct lightcurve_fits_walk *walk, const struct header *header,
                       size_t data_at, uint64_t bytes, bool fits, struct base_error *error)
{
    uint64_t there = walk->size - data_at;
    if (fits && bytes <= there)
        return true;
    if (walk->part.is_table)
        return base_fail(error, BASE_INVALID,
                         "Truncated: the header states %" PRId64 " rows of %" PRId64
                         " bytes, and only %" PRIu64 " bytes follow.",
                         header->axis[1], header->axis[0], there);
    return base_fail(error, BASE_INVALID,
                     "Truncated: part %d of the FITS file states more data than the %" PRIu64
                     " bytes that follow.",
                     walk->part.number, there);
}

/* What a table's header does not say is taken from the primary's. An epoch goes as a whole: the
 * integer part from one header must not meet the fraction from the other. */
static void inherit(struct lightcurve_fits_facts *facts,
                    const struct lightcurve_fits_facts *primary)
{
    if (!lightcurve_fits_epoch_known(&facts->epoch))
        facts->epoch = primary->epoch;
    double *numbers[] = {&facts->time_zero, &facts->ra_deg,        &facts->dec_deg,
                         &facts->magnitude, &facts->temperature_k, &facts->radius_rsun};
    const double others[] = {primary->time_zero, primary->ra_deg,        primary->dec_deg,
                             primary->magnitude, primary->temperature_k, primary->radius_rsun};
    for (size_t i = 0; i < sizeof numbers / sizeof numbers[0]; i++)
        if (isnan(*numbers[i]))
            *numbers[i] = others[i];
    char *texts[] = {facts->time_system, facts->time_frame, facts->time_unit, facts->star};
    const char *sources[] = {primary->time_system, primary->time_frame, primary->time_unit,
                             primary->star};
    for (size_t i = 0; i < sizeof texts / sizeof texts[0]; i++)
        if (texts[i][0] == '\0')
            memcpy(texts[i], sources[i], LIGHTCURVE_FITS_TEXT);
}

bool lightcurve_fits_next(struct lightcurve_fits_walk *walk, bool *found, struct base_error *error)
{
    struct lightcurve_fits_part *part = &walk->part;
    struct header header;
    size_t data_at = 0;
    uint64_t bytes = 0;
    *found = false;
    bool first = part->number == 0;
    /* What follows the last unit without beginning as one is no part of the data. */
    size_t left = walk->at < walk->size ? walk->size - walk->at : 0;
    if (!first &&
        (left == 0 || memcmp(walk->data + walk->at, "XTENSION", left < 8 ? left : 8) != 0))
        return true;
    if (part->number == LIGHTCURVE_FITS_PARTS_MAX)
        return base_fail(error, BASE_TOO_LARGE, "The FITS file has more than %d parts.",
                         LIGHTCURVE_FITS_PARTS_MAX);
    part->number++;
    memset(part->columns, 0, LIGHTCURVE_FITS_COLUMNS_MAX * sizeof *part->columns);
    part->facts = no_facts();
    if (!read_header(walk, &header, &part->facts, &data_at, error) ||
        !check_structure(&header, part->number, error))
        return false;
    part->is_table = !first && strcmp(header.kind, "BINTABLE") == 0;
    part->data_at = data_at;
    part->row_bytes = (uint64_t)header.axis[0];
    part->rows = (uint64_t)header.axis[1];
    part->column_count = header.fields < 0 ? 0 : (size_t)header.fields;
    if (part->is_table && !check_table(&header, part, error))
        return false;
    bool fits = data_bytes(&header, &bytes);
    if (!check_size(walk, &header, data_at, bytes, fits, error))
        return false;
    uint64_t blocks = (bytes + LIGHTCURVE_FITS_BLOCK - 1) / LIGHTCURVE_FITS_BLOCK;
    walk->at = data_at + (size_t)blocks * LIGHTCURVE_FITS_BLOCK;
    if (first)
        walk->primary = part->facts;
    else
        inherit(&part->facts, &walk->primary);
    *found = true;
    return true;
}
