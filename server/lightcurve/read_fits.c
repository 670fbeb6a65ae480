#include "fits_layout.h"

#include <fitsio.h>
#include <inttypes.h>
#include <math.h>
#include <pthread.h>
#include <stdlib.h>
#include <string.h>

/* cfitsio shares tables between threads. Debian builds it reentrant; another build is used by one
 * thread at a time, under this lock. */
static pthread_mutex_t one_at_a_time = PTHREAD_MUTEX_INITIALIZER;

/* Rows read at a time fit into cfitsio's buffers, so that the table passes through them once for
 * all columns (fits_get_rowsize says the same, but divides by zero on some damaged headers). */
#define BLOCK_BYTES ((size_t)30 * LIGHTCURVE_FITS_BLOCK)

/* One table while it is read. */
struct table {
    fitsfile *file;
    const struct lightcurve_fits_part *part;
    struct lightcurve_columns columns;
    double unit_d, zero_d; /* time in days = file's time x unit_d + zero_d */
    int quality_type;      /* what cfitsio is asked for: TDOUBLE, TLONGLONG or TULONGLONG */
    size_t block;          /* rows read at a time */
    int64_t *flags;        /* one block of quality, also holding doubles and unsigned */
    char *names;           /* one block of star names, NULL without a star column */
    char **name_of;        /* pointers into names, as cfitsio wants them */
    size_t name_size;
};

static bool fail_fits(int status, const char *doing, struct base_error *error)
{
    char said[FLEN_STATUS] = "";
    fits_get_errstatus(status, said);
    return base_fail(error, status == MEMORY_ALLOCATION ? BASE_MEMORY : BASE_INVALID,
                     "The FITS library cannot %s: %s.", doing, said);
}

static bool is_number(const struct lightcurve_fits_column *column)
{
    return strchr("BIJKED", column->type) != NULL && column->repeat == 1;
}

static const char *kind_of(const struct lightcurve_fits_column *column)
{
    switch (column->type) {
    case 'A':
        return "text";
    case 'L':
        return "logical values";
    case 'X':
        return "single bits";
    case 'C':
    case 'M':
        return "complex numbers";
    case 'P':
    case 'Q':
        return "arrays of varying length";
    default:
        return "numbers";
    }
}

/* A column that must hold one number a row; `index` -1 is no column. */
static bool check_number(const struct lightcurve_fits_part *part, int index, const char *what,
                         struct base_error *error)
{
    if (index < 0 || is_number(&part->columns[index]))
        return true;
    const struct lightcurve_fits_column *column = &part->columns[index];
    char quoted[LIGHTCURVE_QUOTE_SIZE];
    return base_fail(error, BASE_INVALID,
                     "The %s column %s holds %" PRIu64 " %s a row; one number a row is needed.",
                     what, lightcurve_quote(quoted, column->name, strlen(column->name)),
                     column->repeat, kind_of(column));
}

static bool choose(const struct lightcurve_fits_part *part,
                   const struct lightcurve_mapping *mapping, struct lightcurve_columns *out,
                   struct base_error *error)
{
    bool ok = false;
    size_t count = part->column_count;
    *out = (struct lightcurve_columns){-1, -1, -1, -1, -1};
    if (count == 0)
        return base_fail(error, BASE_INVALID, "The table in part %d has no columns.", part->number);
    char(*names)[LIGHTCURVE_COLUMN_SIZE] = calloc(count, sizeof *names);
    bool *usable = calloc(count, sizeof *usable);
    if (names == NULL || usable == NULL) {
        (void)base_fail(error, BASE_MEMORY, "There is not enough memory to read the FITS table.");
        goto end;
    }
    for (size_t i = 0; i < count; i++) {
        memcpy(names[i], part->columns[i].name, LIGHTCURVE_COLUMN_SIZE);
        usable[i] = is_number(&part->columns[i]);
    }
    if (!lightcurve_columns_choose((const char(*)[LIGHTCURVE_COLUMN_SIZE])names, usable, count,
                                   mapping, NULL, out, error) ||
        !check_number(part, out->time, "time", error) ||
        !check_number(part, out->flux, "flux", error) ||
        !check_number(part, out->error, "error", error) ||
        !check_number(part, out->quality, "quality", error))
        goto end;
    if (out->star >= 0 && (part->columns[out->star].type != 'A' ||
                           part->columns[out->star].repeat > LIGHTCURVE_FITS_BLOCK)) {
        (void)base_fail(error, BASE_INVALID, "The star column holds %s; text is needed.",
                        kind_of(&part->columns[out->star]));
        goto end;
    }
    ok = true;
end:
    free(names);
    free(usable);
    return ok;
}

/* The sum of an integer and a fractional keyword, or the single one. */
static double epoch_of(double whole, double integer, double fraction)
{
    if (isnan(integer))
        return whole;
    return isnan(fraction) ? integer : integer + fraction;
}

/* Word the reference and find the unit: the column's own unit goes before the header's, the
 * header's epoch before what the unit's text says. Days where nothing names a unit. */
static bool read_reference(struct table *table, char reference[LIGHTCURVE_REFERENCE_SIZE],
                           struct base_error *error)
{
    const struct lightcurve_fits_facts *facts = &table->part->facts;
    const struct lightcurve_fits_epoch *epoch = &facts->epoch;
    const char *scale = facts->time_system;
    char ignored[LIGHTCURVE_REFERENCE_SIZE];
    double header_unit_d = 0.0;
    if (!lightcurve_reference_read(table->part->columns[table->columns.time].unit, scale, reference,
                                   &table->unit_d, error) ||
        !lightcurve_reference_read(facts->time_unit, scale, ignored, &header_unit_d, error))
        return false;
    header_unit_d = header_unit_d == 0.0 ? 1.0 : header_unit_d;
    table->unit_d = table->unit_d == 0.0 ? header_unit_d : table->unit_d;
    table->zero_d = isnan(facts->time_zero) ? 0.0 : facts->time_zero * header_unit_d;
    bool sun =
        strncmp(facts->time_frame, "BARY", 4) == 0 || strncmp(facts->time_frame, "SOLAR", 5) == 0;
    bool helio = strncmp(facts->time_frame, "HELIO", 5) == 0;
    double bjd = epoch_of(epoch->bjd, epoch->bjd_i, epoch->bjd_f);
    double mjd = epoch_of(epoch->mjd, epoch->mjd_i, epoch->mjd_f);
    double jd = epoch_of(epoch->jd, epoch->jd_i, epoch->jd_f);
    if (isfinite(bjd))
        lightcurve_reference_word("BJD", scale, bjd, reference);
    else if (isfinite(mjd))
        lightcurve_reference_word(sun ? "BMJD" : helio ? "HMJD" : "MJD", scale, mjd, reference);
    else if (isfinite(jd))
        lightcurve_reference_word(sun ? "BJD" : helio ? "HJD" : "JD", scale, jd, reference);
    return true;
}

/* A header value outside its range is taken as not known. */
static double within(double value, double low, double high)
{
    return value >= low && value <= high ? value : NAN;
}

static void take_star_facts(const struct lightcurve_fits_facts *facts, struct lightcurve_star *star)
{
    star->ra_deg = facts->ra_deg < 360.0 ? within(facts->ra_deg, 0.0, 360.0) : NAN;
    star->dec_deg = within(facts->dec_deg, -90.0, 90.0);
    star->magnitude = within(facts->magnitude, -100.0, 100.0);
    star->temperature_k = facts->temperature_k > 0.0 ? facts->temperature_k : NAN;
    star->radius_rsun = facts->radius_rsun > 0.0 ? facts->radius_rsun : NAN;
}

/* Open the table that the layout found, and make sure that cfitsio sees the same one. */
static bool open_table(struct table *table, void **data, size_t *size, struct base_error *error)
{
    const struct lightcurve_fits_part *part = table->part;
    int status = 0, kind = 0;
    LONGLONG rows = 0, header_at = 0, data_at = 0, ends_at = 0;
    int columns = 0;
    if (fits_open_memfile(&table->file, "memory", READONLY, data, size, 0, NULL, &status) != 0)
        return fail_fits(status, "open the file", error);
    fits_movabs_hdu(table->file, part->number, &kind, &status);
    fits_get_num_rowsll(table->file, &rows, &status);
    fits_get_num_cols(table->file, &columns, &status);
    fits_get_hduaddrll(table->file, &header_at, &data_at, &ends_at, &status);
    if (status != 0)
        return fail_fits(status, "read the table's header", error);
    if (kind != BINARY_TBL || part->row_bytes == 0 || (uint64_t)rows != part->rows ||
        (size_t)columns != part->column_count || (uint64_t)data_at != part->data_at)
        return base_fail(error, BASE_INVALID, "The header of part %d contradicts itself.",
                         part->number);
    table->block = part->row_bytes < BLOCK_BYTES ? BLOCK_BYTES / (size_t)part->row_bytes : 1;
    return true;
}

/* Decide how to ask for quality and take memory for one block. */
static bool prepare_blocks(struct table *table, struct base_error *error)
{
    int status = 0, type = 0;
    if (table->columns.quality >= 0) {
        fits_get_eqcoltypell(table->file, table->columns.quality + 1, &type, NULL, NULL, &status);
        if (status != 0)
            return fail_fits(status, "tell the type of the quality column", error);
        table->quality_type = type == TFLOAT || type == TDOUBLE ? TDOUBLE
                              : type == TULONGLONG              ? TULONGLONG
                                                                : TLONGLONG;
        table->flags = calloc(table->block, sizeof *table->flags);
        if (table->flags == NULL)
            goto no_memory;
    }
    if (table->columns.star >= 0) {
        table->name_size = (size_t)table->part->columns[table->columns.star].repeat + 1;
        table->names = calloc(table->block, table->name_size);
        table->name_of = calloc(table->block, sizeof *table->name_of);
        if (table->names == NULL || table->name_of == NULL)
            goto no_memory;
        for (size_t i = 0; i < table->block; i++)
            table->name_of[i] = table->names + i * table->name_size;
    }
    return true;
no_memory:
    return base_fail(error, BASE_MEMORY, "There is not enough memory to read the FITS table.");
}

/* `rows` numbers of one column as doubles; nulls of integer columns become NAN. Floating point is
 * not searched for nulls, which NAN already are. cfitsio writes through its anynul argument
 * whenever it meets a null, so none of these calls may leave it NULL. */
static void read_doubles(const struct table *table, int index, size_t first, size_t rows,
                         double *out, int *status)
{
    double missing = NAN;
    int any = 0;
    char type = table->part->columns[index].type;
    bool plain = type == 'E' || type == 'D';
    fits_read_col(table->file, TDOUBLE, index + 1, (LONGLONG)first + 1, 1, (LONGLONG)rows,
                  plain ? NULL : &missing, out, &any, status);
}

static void read_quality(const struct table *table, size_t first, size_t rows, int32_t *out,
                         int *status)
{
    int any = 0;
    fits_read_col(table->file, table->quality_type, table->columns.quality + 1, (LONGLONG)first + 1,
                  1, (LONGLONG)rows, NULL, table->flags, &any, status);
    for (size_t i = 0; i < rows && *status == 0; i++) {
        double number;
        memcpy(&number, &table->flags[i], sizeof number);
        out[i] = table->quality_type == TDOUBLE ? lightcurve_quality_of_number(number)
                                                : lightcurve_quality_fold(table->flags[i]);
    }
}

/* Read all rows into one curve that has room for them. */
static bool read_rows(const struct table *table, struct lightcurve_raw *curve,
                      struct base_error *error)
{
    int status = 0;
    size_t rows = (size_t)table->part->rows;
    for (size_t first = 0; first < rows && status == 0; first += table->block) {
        size_t count = rows - first < table->block ? rows - first : table->block;
        read_doubles(table, table->columns.time, first, count, curve->time + first, &status);
        read_doubles(table, table->columns.flux, first, count, curve->flux + first, &status);
        if (table->columns.error >= 0)
            read_doubles(table, table->columns.error, first, count, curve->error + first, &status);
        if (table->columns.quality >= 0)
            read_quality(table, first, count, curve->quality + first, &status);
    }
    if (status != 0)
        return fail_fits(status, "read the table", error);
    if (table->unit_d != 1.0 || table->zero_d != 0.0)
        for (size_t i = 0; i < rows; i++)
            curve->time[i] = curve->time[i] * table->unit_d + table->zero_d;
    curve->count = rows;
    return true;
}

/* Give each row to the star that its star column names. `all` holds the rows. */
static bool split_by_star(const struct table *table, const struct lightcurve_raw *all,
                          struct lightcurve_gather *gather, struct base_error *error)
{
    size_t index = 0;
    for (size_t first = 0; first < all->count; first += table->block) {
        int status = 0, any = 0;
        size_t count = all->count - first < table->block ? all->count - first : table->block;
        fits_read_col(table->file, TSTRING, table->columns.star + 1, (LONGLONG)first + 1, 1,
                      (LONGLONG)count, NULL, table->name_of, &any, &status);
        if (status != 0)
            return fail_fits(status, "read the star column", error);
        for (size_t i = 0; i < count; i++) {
            size_t row = first + i;
            size_t length = strlen(table->name_of[i]);
            while (length > 0 && table->name_of[i][length - 1] == ' ')
                length--;
            if (!lightcurve_gather_star(gather, table->name_of[i], length, &index, error) ||
                !lightcurve_gather_point(gather, index, all->time[row], all->flux[row],
                                         all->error == NULL ? NAN : all->error[row],
                                         all->quality == NULL ? 0 : all->quality[row], error))
                return false;
        }
    }
    return true;
}

/* Room for every row of the table in plain arrays. */
static bool take_arrays(const struct table *table, struct lightcurve_raw *raw,
                        struct base_error *error)
{
    size_t rows = (size_t)table->part->rows;
    raw->time = calloc(rows, sizeof *raw->time);
    raw->flux = calloc(rows, sizeof *raw->flux);
    if (table->columns.error >= 0)
        raw->error = calloc(rows, sizeof *raw->error);
    if (table->columns.quality >= 0)
        raw->quality = calloc(rows, sizeof *raw->quality);
    if (raw->time == NULL || raw->flux == NULL ||
        (table->columns.error >= 0 && raw->error == NULL) ||
        (table->columns.quality >= 0 && raw->quality == NULL))
        return base_fail(error, BASE_MEMORY, "There is not enough memory to read the FITS table.");
    return true;
}

/* Fill the gather from an open table: one star, or as many as the star column names. */
static bool gather_rows(const struct table *table, const char *star,
                        struct lightcurve_gather *gather, struct base_error *error)
{
    bool ok = false;
    size_t index = 0, rows = (size_t)table->part->rows;
    struct lightcurve_raw all = {0};
    if (table->columns.star >= 0) {
        ok = take_arrays(table, &all, error) && read_rows(table, &all, error) &&
             split_by_star(table, &all, gather, error);
        lightcurve_raw_free(&all);
        return ok;
    }
    const char *named = table->part->facts.star;
    const char *name = named[0] == '\0' ? star : named;
    if (!lightcurve_gather_star(gather, name, strlen(name), &index, error) ||
        !lightcurve_gather_reserve(gather, index, rows, error))
        return false;
    take_star_facts(&table->part->facts, &gather->curves[index].star);
    if (!read_rows(table, &gather->curves[index], error))
        return false;
    gather->points = rows;
    return true;
}

static bool check_rows(const struct table *table, struct base_error *error)
{
    uint64_t limit = table->columns.star < 0 ? LIGHTCURVE_POINTS_MAX : LIGHTCURVE_FILE_POINTS_MAX;
    if (table->part->rows == 0)
        return base_fail(error, BASE_INVALID, "The table in part %d has no rows.",
                         table->part->number);
    if (table->part->rows > limit)
        return base_fail(error, BASE_TOO_LARGE,
                         "The table has %" PRIu64 " rows; the limit is %" PRIu64 ".",
                         table->part->rows, limit);
    return true;
}

/* Read the chosen table. `data` is only read: READONLY files in memory are never written to. */
static bool read_table(const char *star, const unsigned char *data, size_t size,
                       const struct lightcurve_fits_part *part, struct lightcurve_columns columns,
                       struct lightcurve_reading *out, struct base_error *error)
{
    bool ok = false;
    struct table table = {.part = part, .columns = columns};
    struct lightcurve_gather gather = {0};
    char reference[LIGHTCURVE_REFERENCE_SIZE];
    unsigned char *padded = NULL;
    void *memory = (void *)data;
    bool locked = false;
    if (!check_rows(&table, error) || !read_reference(&table, reference, error))
        goto end;
    /* Some programs leave out the padding at the end; cfitsio reads whole blocks only. */
    size_t padded_size =
        (size + LIGHTCURVE_FITS_BLOCK - 1) / LIGHTCURVE_FITS_BLOCK * LIGHTCURVE_FITS_BLOCK;
    if (padded_size != size) {
        padded = calloc(1, padded_size);
        if (padded == NULL) {
            (void)base_fail(error, BASE_MEMORY, "There is not enough memory to read the file.");
            goto end;
        }
        memcpy(padded, data, size);
        memory = padded;
        size = padded_size;
    }
    locked = !fits_is_reentrant() && pthread_mutex_lock(&one_at_a_time) == 0;
    lightcurve_gather_start(&gather, columns.error >= 0, columns.quality >= 0);
    ok = open_table(&table, &memory, &size, error) && prepare_blocks(&table, error) &&
         gather_rows(&table, star, &gather, error) &&
         lightcurve_gather_finish(&gather, reference, out, error);
end:
    lightcurve_gather_free(&gather);
    free(table.name_of);
    free(table.names);
    free(table.flags);
    if (table.file != NULL) {
        int status = 0;
        fits_close_file(table.file, &status);
    }
    if (locked)
        (void)pthread_mutex_unlock(&one_at_a_time);
    free(padded);
    return ok;
}

bool lightcurve_read_fits(const char *star, const unsigned char *data, size_t size,
                          const struct lightcurve_mapping *mapping, struct lightcurve_reading *out,
                          struct base_error *error)
{
    bool ok = false, found = false;
    struct lightcurve_fits_walk walk = {0};
    struct lightcurve_columns columns;
    /* Why the most promising table was not taken: one with a time column if there is any. */
    struct base_error reason = {0};
    bool reason_has_time = false;
    if (!lightcurve_fits_open(&walk, data, size, mapping, error))
        goto end;
    for (;;) {
        if (!lightcurve_fits_next(&walk, &found, error))
            goto end;
        if (!found)
            break;
        if (!walk.part.is_table)
            continue;
        struct base_error inner = {0};
        if (choose(&walk.part, mapping, &columns, &inner)) {
            ok = read_table(star, data, size, &walk.part, columns, out, error);
            goto end;
        }
        if (reason.kind == BASE_NONE || (columns.time >= 0 && !reason_has_time)) {
            reason = inner;
            reason_has_time = columns.time >= 0;
        }
    }
    if (reason.kind == BASE_NONE)
        (void)base_fail(&reason, BASE_INVALID, "No binary table is in the FITS file.");
    if (error != NULL)
        *error = reason;
end:
    lightcurve_fits_close(&walk);
    return ok;
}
