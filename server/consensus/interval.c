#include "interval.h"

#include <gsl/gsl_cdf.h>
#include <math.h>

/* From here on the Beta distribution is as good as normal, and the library's continued fraction no
 * longer converges. */
#define NORMAL_FROM 1e4

double interval_beta_quantile(double p, double a, double b)
{
    double low = 0.0, high = 1.0, at = a / (a + b);
    if (a > NORMAL_FROM && b > NORMAL_FROM)
        return at + gsl_cdf_ugaussian_Pinv(p) * sqrt(at * (1.0 - at) / (a + b + 1.0));
    for (int step = 0; step < 200 && high - low > 1e-12; step++) {
        double over = gsl_cdf_beta_P(at, a, b) - p;
        if (over > 0.0)
            high = at;
        else
            low = at;
        double slope = exp(lgamma(a + b) - lgamma(a) - lgamma(b) + (a - 1.0) * log(at) +
                           (b - 1.0) * log1p(-at));
        double next = at - over / slope;
        if (fabs(next - at) < 1e-13)
            return next;
        /* A step that leaves the bracket, or that comes of a vanishing slope, is halved instead. */
        at = next > low && next < high ? next : 0.5 * (low + high);
    }
    return 0.5 * (low + high);
}
