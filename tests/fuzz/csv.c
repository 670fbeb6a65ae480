/*
 * Fuzz target: CSV light curves, bare or gzipped.
 *   make build/fuzz/csv && build/fuzz/csv FOLDER tests/fuzz/csv-seeds
 */
#include "ebbmark/lightcurve_read.h"

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

/* Whatever the bytes are, reading ends in light curves or in a stated error. */
int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size)
{
    static const struct lightcurve_mapping mapping;
    struct lightcurve_reading reading;
    struct base_error error = {0};
    if (size >= 9 && data[0] == 'S' && data[8] == '=')
        return -1; /* FITS has a target of its own */
    bool ok = lightcurve_read_bytes("fuzz.csv", data, size, &mapping, &reading, &error);
    if (ok != (reading.count > 0) || ok != (error.kind == BASE_NONE))
        __builtin_trap();
    for (size_t i = 0; ok && i < reading.count; i++)
        if (reading.curves[i].star.name[0] == '\0' || reading.curves[i].time_reference[0] == '\0')
            __builtin_trap();
    lightcurve_reading_free(&reading);
    return 0;
}
