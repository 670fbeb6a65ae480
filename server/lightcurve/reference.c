#include "read.h"

#include "ebbmark/text.h"

#include <ctype.h>
#include <math.h>
#include <stdio.h>
#include <string.h>
#include <strings.h>

/* Time scales of FITS 4.0, table 30, without the local one. */
static const char *const scales[] = {"TDB", "TT",  "UTC", "TAI", "TCB", "TCG",
                                     "UT1", "GPS", "TDT", "ET",  "IAT", "GMT"};
static const char *const kinds[] = {"BJD", "HJD", "MJD", "BMJD", "HMJD", "JD"};

static const struct {
    const char *word;
    double days;
} units[] = {{"d", 1.0},
             {"day", 1.0},
             {"days", 1.0},
             {"s", 1.0 / 86400.0},
             {"sec", 1.0 / 86400.0},
             {"second", 1.0 / 86400.0},
             {"seconds", 1.0 / 86400.0},
             {"min", 1.0 / 1440.0},
             {"minute", 1.0 / 1440.0},
             {"minutes", 1.0 / 1440.0},
             {"h", 1.0 / 24.0},
             {"hr", 1.0 / 24.0},
             {"hour", 1.0 / 24.0},
             {"hours", 1.0 / 24.0},
             {"yr", 365.25},
             {"year", 365.25},
             {"years", 365.25}};

/* The known time scale that `text` begins with and that ends there or at something that is no
 * letter or digit; NULL when there is none. */
static const char *scale_at(const char *text)
{
    for (size_t i = 0; i < sizeof scales / sizeof scales[0]; i++) {
        size_t length = strlen(scales[i]);
        if (strncasecmp(text, scales[i], length) == 0 && !isalnum((unsigned char)text[length]))
            return scales[i];
    }
    return NULL;
}

void lightcurve_reference_word(const char *kind, const char *scale, double offset_d,
                               char reference[LIGHTCURVE_REFERENCE_SIZE])
{
    char number[BASE_NUMBER_SIZE];
    const char *known = scale_at(scale);
    const char *sign = offset_d == 0.0 ? "" : offset_d < 0.0 ? " + " : " - ";
    (void)snprintf(reference, LIGHTCURVE_REFERENCE_SIZE, "%s%s%s%s%s", kind,
                   known == NULL ? "" : "_", known == NULL ? "" : known, sign,
                   offset_d == 0.0 ? "" : base_text_number(number, fabs(offset_d)));
}

static const char *pass_blanks(const char *at)
{
    while (*at == ' ' || *at == '\t')
        at++;
    return at;
}

/* The scale after a kind: "_TDB", "(TDB)" or " TDB". Moves *at past it. */
static const char *read_scale(const char **at)
{
    const char *look = pass_blanks(*at);
    bool bracket = *look == '(' || *look == '[';
    if (bracket || *look == '_')
        look++;
    const char *scale = scale_at(look);
    if (scale == NULL)
        return NULL;
    look += strlen(scale);
    if (bracket && (*look == ')' || *look == ']'))
        look++;
    *at = look;
    return scale;
}

/* Digits and a point after a minus sign; 0 when there is no such thing. */
static double read_offset(const char *at)
{
    char digits[32];
    at = pass_blanks(at);
    if (*at != '-')
        return 0.0;
    at = pass_blanks(at + 1);
    size_t length = strspn(at, "0123456789.");
    double offset = 0.0;
    if (length == 0 || length >= sizeof digits)
        return 0.0;
    memcpy(digits, at, length);
    digits[length] = '\0';
    return base_text_read_number(digits, &offset) ? offset : 0.0;
}

/* Does a word of the text name a unit of time? */
static double unit_of_words(const char *text)
{
    for (const char *at = text; *at != '\0';) {
        if (!isalpha((unsigned char)*at)) {
            at++;
            continue;
        }
        size_t length = 0;
        while (isalnum((unsigned char)at[length]) || at[length] == '_')
            length++;
        for (size_t i = 0; i < sizeof units / sizeof units[0]; i++)
            if (strlen(units[i].word) == length && strncasecmp(at, units[i].word, length) == 0)
                return units[i].days;
        at += length;
    }
    return 0.0;
}

/* The kind of Julian date that stands alone as a word in the text; NULL when there is none. *after
 * is what follows it. */
static const char *find_kind(const char *text, const char **after)
{
    for (const char *at = text; *at != '\0'; at++) {
        if (at != text && isalnum((unsigned char)at[-1]))
            continue;
        for (size_t i = 0; i < sizeof kinds / sizeof kinds[0]; i++) {
            size_t length = strlen(kinds[i]);
            if (strncasecmp(at, kinds[i], length) == 0 && !isalnum((unsigned char)at[length])) {
                *after = at + length;
                return kinds[i];
            }
        }
    }
    return NULL;
}

bool lightcurve_reference_read(const char *text, const char *scale,
                               char reference[LIGHTCURVE_REFERENCE_SIZE], double *unit_d,
                               struct base_error *error)
{
    reference[0] = '\0';
    *unit_d = 0.0;
    if (*pass_blanks(text) == '\0')
        return true;
    *unit_d = unit_of_words(text);
    const char *after = NULL;
    const char *kind = find_kind(text, &after);
    if (kind != NULL) {
        const char *said = read_scale(&after);
        lightcurve_reference_word(kind, said != NULL ? said : scale, read_offset(after), reference);
    } else if (strcasestr(text, "JD") != NULL && base_text_is_utf8(text, strlen(text)) &&
               strlen(text) < LIGHTCURVE_REFERENCE_SIZE) {
        /* A survey's own name for its count of days: kept as the file has it. */
        (void)snprintf(reference, LIGHTCURVE_REFERENCE_SIZE, "%s", pass_blanks(text));
    }
    if (reference[0] != '\0' && *unit_d == 0.0)
        *unit_d = 1.0;
    char quoted[LIGHTCURVE_QUOTE_SIZE];
    if (*unit_d == 0.0)
        return base_fail(error, BASE_INVALID,
                         "The time column's unit \"%s\" is not a unit of time that is read (d, h, "
                         "min, s or yr).",
                         lightcurve_quote(quoted, text, strlen(text)));
    return true;
}
