#include "ebbmark/lightcurve_inject.h"

void lightcurve_inject(const double *flux, const double *model, size_t n, double *out)
{
    for (size_t i = 0; i < n; i++)
        out[i] = flux[i] * model[i];
}

void lightcurve_invert(const double *flux, const double *trend, size_t n, double *out)
{
    for (size_t i = 0; i < n; i++) {
        double about = trend != NULL ? trend[i] : 1.0;
        out[i] = 2.0 * about - flux[i];
    }
}
