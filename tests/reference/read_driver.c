/*
 * Prints, as JSON, what lightcurve_read_bytes finds in a file: for tests/reference/fits.py.
 * Usage: read_driver FILE [time=NAME flux=NAME error=NAME quality=NAME star=NAME KEY=KEYWORD …]
 */
#include "ebbmark/lightcurve_read.h"
#include "ebbmark/text.h"

#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static bool set_mapping(struct lightcurve_mapping *mapping, const char *argument)
{
    const struct {
        const char *name;
        char *target;
        size_t size;
    } known[] = {{"time", mapping->time, sizeof mapping->time},
                 {"flux", mapping->flux, sizeof mapping->flux},
                 {"error", mapping->error, sizeof mapping->error},
                 {"quality", mapping->quality, sizeof mapping->quality},
                 {"star", mapping->star, sizeof mapping->star},
                 {"key_name", mapping->key_name, sizeof mapping->key_name},
                 {"key_magnitude", mapping->key_magnitude, sizeof mapping->key_magnitude}};
    const char *equals = strchr(argument, '=');
    for (size_t i = 0; equals != NULL && i < sizeof known / sizeof known[0]; i++)
        if (strlen(known[i].name) == (size_t)(equals - argument) &&
            strncmp(known[i].name, argument, (size_t)(equals - argument)) == 0)
            return snprintf(known[i].target, known[i].size, "%s", equals + 1) < (int)known[i].size;
    return false;
}

static void print_text(const char *name, const char *text)
{
    printf("\"%s\":\"", name);
    for (; *text != '\0'; text++)
        if (*text == '"' || *text == '\\')
            printf("\\%c", *text);
        else
            putchar(*text);
    printf("\"");
}

/* A number as every JSON reader takes it; what is not finite goes as text. */
static void print_number(double value)
{
    char text[BASE_NUMBER_SIZE];
    if (isfinite(value))
        fputs(base_text_number(text, value), stdout);
    else
        fputs(isnan(value) ? "\"nan\"" : value > 0 ? "\"inf\"" : "\"-inf\"", stdout);
}

static void print_numbers(const char *name, const double *values, size_t count)
{
    printf(",\"%s\":", name);
    if (values == NULL) {
        printf("null");
        return;
    }
    for (size_t i = 0; i < count; i++) {
        putchar(i == 0 ? '[' : ',');
        print_number(values[i]);
    }
    printf("]");
}

static void print_curve(const struct lightcurve_raw *curve)
{
    const struct lightcurve_star *star = &curve->star;
    const double facts[] = {star->ra_deg, star->dec_deg, star->magnitude, star->temperature_k,
                            star->radius_rsun};
    printf("{");
    print_text("star", star->name);
    printf(",");
    print_text("reference", curve->time_reference);
    print_numbers("facts", facts, sizeof facts / sizeof facts[0]);
    print_numbers("time", curve->time, curve->count);
    print_numbers("flux", curve->flux, curve->count);
    print_numbers("error", curve->error, curve->count);
    printf(",\"quality\":");
    for (size_t i = 0; curve->quality != NULL && i < curve->count; i++)
        printf("%c%" PRId32, i == 0 ? '[' : ',', curve->quality[i]);
    printf(curve->quality == NULL ? "null}" : "]}");
}

static unsigned char *read_whole(const char *path, size_t *size)
{
    unsigned char *data = NULL;
    FILE *file = fopen(path, "rb");
    if (file == NULL)
        return NULL;
    if (fseek(file, 0, SEEK_END) == 0 && ftell(file) >= 0) {
        *size = (size_t)ftell(file);
        rewind(file);
        data = malloc(*size + 1);
        if (data != NULL && fread(data, 1, *size, file) != *size) {
            free(data);
            data = NULL;
        }
    }
    (void)fclose(file);
    return data;
}

int main(int argc, char **argv)
{
    struct lightcurve_mapping mapping = {0};
    struct lightcurve_reading reading = {0};
    struct base_error error = {0};
    size_t size = 0;
    for (int i = 2; i < argc; i++)
        if (!set_mapping(&mapping, argv[i])) {
            fprintf(stderr, "%s is no NAME=VALUE that is known.\n", argv[i]);
            return 2;
        }
    unsigned char *data = argc < 2 ? NULL : read_whole(argv[1], &size);
    if (data == NULL) {
        fprintf(stderr, "A readable FILE is needed.\n");
        return 2;
    }
    if (lightcurve_read_bytes(argv[1], data, size, &mapping, &reading, &error)) {
        printf("{\"curves\":[");
        for (size_t i = 0; i < reading.count; i++) {
            fputs(i == 0 ? "" : ",", stdout);
            print_curve(&reading.curves[i]);
        }
        printf("]}\n");
    } else {
        printf("{\"kind\":\"%s\",", base_error_kind_name(error.kind));
        print_text("error", error.sentence);
        printf("}\n");
    }
    lightcurve_reading_free(&reading);
    free(data);
    return 0;
}
