/*
 * How fast a FITS light curve is loaded, against cfitsio alone reading the same four columns of the
 * same table from the same memory, in one run on one machine. Prints a table and changes nothing.
 */
#include <fitsio.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/clock.h"
#include "ebbmark/lightcurve_read.h"

#define COLUMNS 20
#define TURNS 60
#define RATIO_WANTED 0.5

static void give_up(const char *what)
{
    (void)fprintf(stderr, "%s\n", what);
    exit(1);
}

/* A table of 20 columns, of which a light curve takes four: the shape of a survey's product. */
static void *make_file(LONGLONG rows, size_t *size)
{
    char names[COLUMNS][16], *name_of[COLUMNS], *form_of[COLUMNS];
    fitsfile *file = NULL;
    int status = 0;
    LONGLONG ends_at = 0;
    size_t room = 2880;
    void *buffer = calloc(1, room);
    double *values = calloc((size_t)rows, sizeof *values);
    if (buffer == NULL || values == NULL)
        give_up("There is not enough memory.");
    for (int c = 0; c < COLUMNS; c++) {
        static const char *const taken[] = {"TIME", "FLUX", "FLUX_ERR", "QUALITY"};
        if (c % 5 == 0)
            (void)snprintf(names[c], sizeof names[c], "%s", taken[c / 5]);
        else
            (void)snprintf(names[c], sizeof names[c], "OTHER_%d", c);
        name_of[c] = names[c];
        form_of[c] = c == 0 ? "D" : c == 15 ? "J" : "E";
    }
    fits_create_memfile(&file, &buffer, &room, 1u << 20, realloc, &status);
    fits_create_img(file, BYTE_IMG, 0, NULL, &status);
    fits_create_tbl(file, BINARY_TBL, rows, COLUMNS, name_of, form_of, NULL, "CURVE", &status);
    for (int c = 0; c < COLUMNS; c++) {
        for (LONGLONG i = 0; i < rows; i++)
            values[i] = c == 15 ? (double)(i % 50 == 0) : c == 0 ? 100.0 + (double)i / 720.0 : 1e4;
        fits_write_col(file, TDOUBLE, c + 1, 1, 1, rows, values, &status);
    }
    fits_flush_file(file, &status);
    fits_get_hduaddrll(file, NULL, NULL, &ends_at, &status);
    fits_close_file(file, &status);
    if (status != 0)
        give_up("cfitsio cannot make the file.");
    free(values);
    *size = (size_t)ends_at;
    return buffer;
}

/* Seconds that cfitsio alone takes from the bytes in memory to four plain arrays. */
static double time_alone(void *data, size_t size)
{
    static char *const names[] = {"TIME", "FLUX", "FLUX_ERR", "QUALITY"};
    double missing = NAN, *arrays[3];
    fitsfile *file = NULL;
    LONGLONG rows = 0;
    int status = 0, kind = 0, column = 0, any = 0;
    double began = base_clock_monotonic_s();
    fits_open_memfile(&file, "memory", READONLY, &data, &size, 0, NULL, &status);
    fits_movabs_hdu(file, 2, &kind, &status);
    fits_get_num_rowsll(file, &rows, &status);
    for (int c = 0; c < 3; c++) {
        arrays[c] = malloc((size_t)rows * sizeof **arrays);
        fits_get_colnum(file, CASEINSEN, names[c], &column, &status);
        fits_read_col(file, TDOUBLE, column, 1, 1, rows, &missing, arrays[c], &any, &status);
    }
    int *quality = malloc((size_t)rows * sizeof *quality);
    fits_get_colnum(file, CASEINSEN, names[3], &column, &status);
    fits_read_col(file, TINT, column, 1, 1, rows, NULL, quality, &any, &status);
    fits_close_file(file, &status);
    double took = base_clock_monotonic_s() - began;
    if (status != 0)
        give_up("cfitsio cannot read the file.");
    for (int c = 0; c < 3; c++)
        free(arrays[c]);
    free(quality);
    return took;
}

static double time_ours(const void *data, size_t size, size_t rows)
{
    static const struct lightcurve_mapping mapping;
    struct lightcurve_reading reading;
    struct base_error error = {0};
    double began = base_clock_monotonic_s();
    if (!lightcurve_read_bytes("bench.fits", data, size, &mapping, &reading, &error))
        give_up(error.sentence);
    double took = base_clock_monotonic_s() - began;
    if (reading.curves[0].count != rows)
        give_up("Rows are missing.");
    lightcurve_reading_free(&reading);
    return took;
}

static double least(double a, double b)
{
    return a < b ? a : b;
}

int main(void)
{
    static const size_t rows[] = {1300, 20000, 200000};
    bool held = true;
    (void)printf("%-12s %14s %14s %8s %8s\n", "FITS rows", "cfitsio, ms", "loaded, ms", "ratio",
                 "wanted");
    for (size_t r = 0; r < sizeof rows / sizeof rows[0]; r++) {
        size_t size = 0;
        void *data = make_file((LONGLONG)rows[r], &size);
        double alone = INFINITY, ours = INFINITY;
        for (int turn = 0; turn < TURNS; turn++) {
            alone = least(alone, time_alone(data, size));
            ours = least(ours, time_ours(data, size, rows[r]));
        }
        (void)printf("%-12zu %14.3f %14.3f %8.2f %8.2f\n", rows[r], alone * 1e3, ours * 1e3,
                     alone / ours, RATIO_WANTED);
        held = held && alone / ours >= RATIO_WANTED;
        free(data);
    }
    return held ? 0 : 1;
}
