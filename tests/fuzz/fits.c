/*
 * Fuzz target: FITS light curves.
 *   make build/fuzz/fits && build/fuzz/fits -dict=tests/fuzz/fits.dict FOLDER tests/fuzz/fits-seeds
 */
#include "ebbmark/lightcurve_read.h"

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

/* Whatever the bytes are, reading ends in light curves or in a stated error. The star column is
 * asked for in every second input, so that text columns are reached too. */
int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size)
{
    struct lightcurve_mapping mapping = {.star = ""};
    struct lightcurve_reading reading;
    struct base_error error = {0};
    if (size < 9)
        return -1;
    if (size % 2 == 0)
        mapping = (struct lightcurve_mapping){.star = "STAR"};
    bool ok = lightcurve_read_bytes("fuzz.fits", data, size, &mapping, &reading, &error);
    if (ok != (reading.count > 0) || ok != (error.kind == BASE_NONE))
        __builtin_trap();
    for (size_t i = 0; ok && i < reading.count; i++)
        if (reading.curves[i].star.name[0] == '\0' || reading.curves[i].time_reference[0] == '\0')
            __builtin_trap();
    lightcurve_reading_free(&reading);
    return 0;
}
