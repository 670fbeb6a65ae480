#include <assert.h>
#include <math.h>

#include "ebbmark/series.h"

void ephemeris_line_fit(const double *mid_d, const double *mid_error_d, const int64_t *cycle,
                        size_t n, struct ephemeris_line *out, int64_t *origin)
{
    assert(n >= 2);
    double weight = 0.0, cycles = 0.0, times = 0.0, squares = 0.0, products = 0.0, chi2 = 0.0;
    for (size_t i = 0; i < n; i++) {
        double w = 1.0 / (mid_error_d[i] * mid_error_d[i]);
        weight += w;
        cycles += w * (double)(cycle[i] - cycle[0]);
        times += w * (mid_d[i] - mid_d[0]);
    }
    cycles /= weight;
    times /= weight;
    for (size_t i = 0; i < n; i++) {
        double w = 1.0 / (mid_error_d[i] * mid_error_d[i]);
        double x = (double)(cycle[i] - cycle[0]) - cycles;
        squares += w * x * x;
        products += w * x * (mid_d[i] - mid_d[0] - times);
    }
    assert(squares > 0.0);
    double period = products / squares, from_middle = nearbyint(cycles) - cycles;
    for (size_t i = 0; i < n; i++) {
        double x = (double)(cycle[i] - cycle[0]) - cycles;
        double off = (mid_d[i] - mid_d[0] - times - period * x) / mid_error_d[i];
        chi2 += off * off;
    }
    *out = (struct ephemeris_line){.period_d = period,
                                   .period_error_d = sqrt(1.0 / squares),
                                   .epoch_d = mid_d[0] + times + period * from_middle,
                                   .epoch_error_d =
                                       sqrt(1.0 / weight + from_middle * from_middle / squares),
                                   .covariance_d2 = from_middle / squares,
                                   .chi2 = chi2,
                                   .freedom = n - 2};
    if (origin != NULL)
        *origin = cycle[0] + (int64_t)nearbyint(cycles);
}

double ephemeris_line_mid_d(const struct ephemeris_line *line, int64_t cycle)
{
    return line->epoch_d + (double)cycle * line->period_d;
}

double ephemeris_line_mid_error_d(const struct ephemeris_line *line, int64_t cycle)
{
    double x = (double)cycle;
    double variance = line->epoch_error_d * line->epoch_error_d +
                      x * x * line->period_error_d * line->period_error_d +
                      2.0 * x * line->covariance_d2;
    return sqrt(fmax(variance, 0.0));
}
