/*
 * What the readers of light-curve files share: unpacking gzip, splitting CSV, choosing columns,
 * wording time references, and gathering points by star. Private to the room.
 */
#ifndef EBBMARK_SERVER_LIGHTCURVE_READ_H
#define EBBMARK_SERVER_LIGHTCURVE_READ_H

#include "ebbmark/lightcurve_read.h"

#define LIGHTCURVE_COLUMN_SIZE 72           /* bytes of a column's name or unit with its NUL */
#define LIGHTCURVE_RATIO_FROM (64ull << 20) /* unpacked bytes from which the ratio is looked at */

/* Both readers fill `out` from `size` bytes at `data`; `star` names the star where the file does
 * not. They fail as lightcurve_read_bytes does and then leave `out` zeroed. */
bool lightcurve_read_fits(const char *star, const unsigned char *data, size_t size,
                          const struct lightcurve_mapping *mapping, struct lightcurve_reading *out,
                          struct base_error *error);
bool lightcurve_read_csv(const char *star, const char *data, size_t size,
                         const struct lightcurve_mapping *mapping, struct lightcurve_reading *out,
                         struct base_error *error);

/* ---- gzip.c ------------------------------------------------------------------------------ */

bool lightcurve_gzip_is(const void *data, size_t size);

/* Unpack gzip members, one after another, into a new buffer that the caller frees. BASE_INVALID
 * "Truncated…" or damaged, BASE_TOO_LARGE past LIGHTCURVE_FILE_BYTES_MAX or, from
 * LIGHTCURVE_RATIO_FROM on, past LIGHTCURVE_ARCHIVE_RATIO_MAX times the packed size. */
bool lightcurve_gzip_unpack(const void *data, size_t size, unsigned char **out, size_t *out_size,
                            struct base_error *error);

/* Unpack at most `room` bytes from the start and say how many came; damage just ends it. */
size_t lightcurve_gzip_peek(const void *data, size_t size, void *out, size_t room);

/* True when the bytes begin a zip or tar archive. */
bool lightcurve_archive_is(const void *data, size_t size);

/* True when unpacking has grown past the ratio limit: then a sentence is in `error`. */
bool lightcurve_ratio_exceeded(uint64_t unpacked, uint64_t packed, struct base_error *error);

/* ---- file.c ------------------------------------------------------------------------------ */

/* Open a regular file under the folder `at` (AT_FDCWD for the working one); `follow` says whether
 * the name itself may be a link. *fd is -1 on failure. `label` names it in sentences. */
bool lightcurve_file_open(int at, const char *name, bool follow, const char *label, int *fd,
                          uint64_t *size, struct base_error *error);

/* The whole of an open file as a new buffer that the caller frees (never NULL on success).
 * BASE_TOO_LARGE past LIGHTCURVE_FILE_BYTES_MAX. A file that shrinks meanwhile is read as it is. */
bool lightcurve_file_read(int fd, uint64_t size, const char *label, unsigned char **data,
                          size_t *length, struct base_error *error);

/* ---- csv.c ------------------------------------------------------------------------------- */

struct lightcurve_csv_field {
    const char *text; /* not NUL-terminated; valid until the next line is read */
    size_t length;
};

/* A CSV being split (RFC 4180, with comma, tab or semicolon, any line ending, blank lines passed
 * over). Free with lightcurve_csv_close. */
struct lightcurve_csv {
    const char *at, *end;
    size_t line;      /* number of the line that the fields stand on, from 1 */
    size_t next_line; /* number of the line at `at` */
    char separator;
    struct lightcurve_csv_field *fields;
    size_t count;  /* fields on this line */
    size_t header; /* fields in the header: other lines must have as many; 0 before it is read */
    char *scratch; /* unquoted text of this line */
};

/* Begin: passes over a byte order mark and lines starting with '#', tells the separator and reads
 * the header into `fields`. BASE_INVALID when there is none or its fields are all numbers. */
bool lightcurve_csv_open(struct lightcurve_csv *csv, const char *data, size_t size,
                         struct base_error *error);
/* The next line's fields; *found is false at the end. */
bool lightcurve_csv_next(struct lightcurve_csv *csv, bool *found, struct base_error *error);
void lightcurve_csv_close(struct lightcurve_csv *csv);

/* A field as a number; empty, nan, null, na, n/a, none and -- give NAN. False for other text. */
bool lightcurve_csv_number(struct lightcurve_csv_field field, double *out);

/* "flux [e-/s]" or "flux (e-/s)" taken apart; a name or unit that does not fit is left empty. */
void lightcurve_csv_name(struct lightcurve_csv_field field, char name[LIGHTCURVE_COLUMN_SIZE],
                         char unit[LIGHTCURVE_COLUMN_SIZE]);

/* Text from a file made fit to stand in a sentence: shortened to 40 bytes, odd bytes as '?'. */
#define LIGHTCURVE_QUOTE_SIZE 48
const char *lightcurve_quote(char buffer[LIGHTCURVE_QUOTE_SIZE], const char *text, size_t length);

/* ---- columns.c --------------------------------------------------------------------------- */

struct lightcurve_columns {
    int time, flux, error, quality, star; /* index, or -1 for none */
};

/* Choose columns by the mapping or by the defaults in lightcurve_read.h. `usable` says which may
 * be taken as flux by default (NULL: all). `star_default` is the star column's name where the
 * mapping has none (NULL: no such column). BASE_INVALID "No flux column: …"; out->time is then
 * -1 exactly when the time column was not found either. */
bool lightcurve_columns_choose(const char (*names)[LIGHTCURVE_COLUMN_SIZE], const bool *usable,
                               size_t count, const struct lightcurve_mapping *mapping,
                               const char *star_default, struct lightcurve_columns *out,
                               struct base_error *error);

/* ---- reference.c ------------------------------------------------------------------------- */

/* What a time column's unit text says, such as "BJD_TDB - 2457000, d" or "s". `reference` is
 * filled in the canonical form, or left empty when the text holds none; `*unit_d` is the unit in
 * days, or 0 when the text names none. BASE_INVALID for a unit that is not a time's. */
bool lightcurve_reference_read(const char *text, const char *scale,
                               char reference[LIGHTCURVE_REFERENCE_SIZE], double *unit_d,
                               struct base_error *error);

/* "BJD_TDB - 2457000" from its parts; `scale` may be empty or a TIMESYS value as it stands, which
 * is left out when it is no known time scale. */
void lightcurve_reference_word(const char *kind, const char *scale, double offset_d,
                               char reference[LIGHTCURVE_REFERENCE_SIZE]);

/* What stands where a file says nothing about its time reference. */
#define LIGHTCURVE_REFERENCE_UNSTATED "unstated"

/* ---- gather.c ---------------------------------------------------------------------------- */

/* Light curves growing side by side, found by star name. */
struct lightcurve_gather {
    struct lightcurve_raw *curves;
    size_t *capacity; /* points that each curve has room for */
    size_t count, room;
    uint32_t *slots; /* hash table of curve number + 1; a power of two long */
    size_t slot_count;
    unsigned char key[16]; /* of the hash, so that a file cannot choose its collisions */
    size_t points;         /* over all curves */
    bool with_error, with_quality;
};

void lightcurve_gather_start(struct lightcurve_gather *gather, bool with_error, bool with_quality);
void lightcurve_gather_free(struct lightcurve_gather *gather);

/* The curve of a star, added when new. BASE_INVALID for a name that is empty, too long, not UTF-8
 * or holds control characters, BASE_TOO_LARGE past LIGHTCURVE_STARS_PER_FILE_MAX. */
bool lightcurve_gather_star(struct lightcurve_gather *gather, const char *name, size_t length,
                            size_t *index, struct base_error *error);

/* Make room for `more` points in one curve. BASE_TOO_LARGE past the limits on points. */
bool lightcurve_gather_reserve(struct lightcurve_gather *gather, size_t index, size_t more,
                               struct base_error *error);

bool lightcurve_gather_point(struct lightcurve_gather *gather, size_t index, double time,
                             double flux, double point_error, int32_t quality,
                             struct base_error *error);

/* Hand the curves over, each with the time reference. BASE_INVALID when there are no points or
 * none has both a time and a flux. */
bool lightcurve_gather_finish(struct lightcurve_gather *gather, const char *reference,
                              struct lightcurve_reading *out, struct base_error *error);

/* Flags wider than 32 bits folded into them: what does not fit sets the highest bit. */
int32_t lightcurve_quality_fold(int64_t flags);
/* The same from a number that was stored as text or in floating point: NAN is 0 (nothing said), a
 * fraction or a number out of range sets the highest bit. */
int32_t lightcurve_quality_of_number(double flags);

#endif
