#include "invent_inside.h"

#include <errno.h>
#include <fcntl.h>
#include <fitsio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

#include "ebbmark/text.h"

#define FITS_START ((size_t)16 * 2880)

/* Write all bytes and see that they reached the disk. */
static bool write_through(int fd, const char *path, const void *data, size_t size,
                          struct base_error *error)
{
    const char *bytes = data;
    for (size_t done = 0; done < size;) {
        ssize_t put = write(fd, bytes + done, size - done);
        if (put < 0 && errno == EINTR)
            continue;
        if (put < 0)
            return base_fail_errno(error, errno, "Writing %s", path);
        done += (size_t)put;
    }
    return fsync(fd) == 0 || base_fail_errno(error, errno, "Writing %s", path);
}

bool invent_file_write(const char *folder, const char *name, const void *data, size_t size,
                       struct base_error *error)
{
    bool ok = false;
    int fd = -1;
    struct base_text path = {0}, part = {0};
    base_text_add_format(&path, "%s/%s", folder, name);
    base_text_add_format(&part, "%s/%s.part", folder, name);
    if (path.failed || part.failed) {
        (void)base_fail(error, BASE_MEMORY, "There is not enough memory to write the survey.");
        goto end;
    }
    fd = open(part.data, O_WRONLY | O_CREAT | O_TRUNC | O_CLOEXEC | O_NOFOLLOW, 0666);
    if (fd < 0) {
        (void)base_fail_errno(error, errno, "Making %s", part.data);
        goto end;
    }
    ok = write_through(fd, part.data, data, size, error);
    if (close(fd) != 0 && ok)
        ok = base_fail_errno(error, errno, "Writing %s", part.data);
    if (ok && rename(part.data, path.data) != 0)
        ok = base_fail_errno(error, errno, "Renaming %s", part.data);
    if (!ok)
        (void)unlink(part.data);
end:
    base_text_free(&part);
    base_text_free(&path);
    return ok;
}

static void write_primary(fitsfile *file, const struct invent_star *star, int *status)
{
    fits_create_img(file, BYTE_IMG, 0, NULL, status);
    fits_write_key_str(file, "ORIGIN", "invented", "nothing here was observed", status);
    fits_write_key_str(file, "TELESCOP", "Long Reach", "an invented array", status);
    fits_write_key_str(file, "FIELD", "Reedbed", "an invented field", status);
    fits_write_key_str(file, "OBJECT", star->about.name, "name of the star", status);
    fits_write_key_dbl(file, "RA_OBJ", star->about.ra_deg, -9, "[deg] right ascension", status);
    fits_write_key_dbl(file, "DEC_OBJ", star->about.dec_deg, -9, "[deg] declination", status);
    fits_write_key_dbl(file, "MAG", star->about.magnitude, -5, "[mag] brightness", status);
    fits_write_key_dbl(file, "TEFF", star->about.temperature_k, -6, "[K] temperature", status);
    fits_write_key_dbl(file, "RADIUS", star->about.radius_rsun, -5, "[solRad] radius", status);
}

static void write_table(fitsfile *file, const struct invent_star *star, int *status)
{
    char *names[] = {"TIME", "FLUX", "FLUX_ERR", "QUALITY"};
    char *forms[] = {"D", "E", "E", "J"};
    char *units[] = {"d", "e-/s", "e-/s", ""};
    LONGLONG rows = (LONGLONG)star->count;
    fits_create_tbl(file, BINARY_TBL, rows, 4, names, forms, units, "LIGHTCURVE", status);
    fits_write_key_lng(file, "BJDREFI", INVENT_REFERENCE_D, "integer part of the time reference",
                       status);
    fits_write_key_dbl(file, "BJDREFF", 0.0, -1, "its fraction", status);
    fits_write_key_str(file, "TIMESYS", "TDB", "time scale", status);
    fits_write_key_str(file, "TIMEUNIT", "d", "unit of time", status);
    fits_write_key_str(file, "TIMEREF", "SOLARSYSTEM", "times are barycentric", status);
    fits_write_key_dbl(file, "EXPOSURE", 1800.0, -5, "[s] of one cadence", status);
    /* cfitsio takes its input without const and only reads it. */
    fits_write_col(file, TDOUBLE, 1, 1, 1, rows, (void *)star->time, status);
    fits_write_col(file, TDOUBLE, 2, 1, 1, rows, (void *)star->flux, status);
    fits_write_col(file, TDOUBLE, 3, 1, 1, rows, (void *)star->error, status);
    fits_write_col(file, TINT, 4, 1, 1, rows, (void *)star->quality, status);
}

bool invent_fits_make(const struct invent_star *star, unsigned char **data, size_t *size,
                      struct base_error *error)
{
    fitsfile *file = NULL;
    int status = 0;
    LONGLONG header_at = 0, data_at = 0, ends_at = 0;
    size_t room = FITS_START;
    void *buffer = calloc(1, room);
    if (buffer == NULL)
        return base_fail(error, BASE_MEMORY, "There is not enough memory to write the survey.");
    if (fits_create_memfile(&file, &buffer, &room, FITS_START, realloc, &status) == 0) {
        write_primary(file, star, &status);
        write_table(file, star, &status);
        fits_flush_file(file, &status);
        fits_get_hduaddrll(file, &header_at, &data_at, &ends_at, &status);
        fits_close_file(file, &status);
    }
    if (status != 0) {
        char said[FLEN_STATUS] = "";
        fits_get_errstatus(status, said);
        free(buffer);
        return base_fail(error, BASE_INTERNAL, "The FITS library cannot make a file: %s.", said);
    }
    *data = buffer;
    *size = (size_t)ends_at;
    return true;
}
