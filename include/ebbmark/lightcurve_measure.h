/*
 * Trend, noise, and the measurement of one dip. Pure; thread-safe; results do not depend on
 * anything but the arguments.
 */
#ifndef EBBMARK_LIGHTCURVE_MEASURE_H
#define EBBMARK_LIGHTCURVE_MEASURE_H

#include "ebbmark/lightcurve.h"

#define LIGHTCURVE_TREND_WINDOW_D 1.5 /* default width of the sliding window */

/* Sliding Tukey biweight location (c = 6 MAD) in a window of window_d centred on each point and
 * broken at gaps longer than gap_d. time (d, increasing), flux and trend hold n values. trend is
 * everywhere finite and follows the star, not the dips. Within half a window of a stretch's end a
 * robust line through the last whole window stands in, since a shorter window would follow a dip
 * there. Exact at anchors a fiftieth of the window apart and linear between, so the cost is about
 * 50 n whatever the cadence: 20,000 points take some hundredths of a second. BASE_MEMORY on
 * failure. */
bool lightcurve_trend(const double *time, const double *flux, size_t n, double window_d,
                      double gap_d, double *trend, struct base_error *error);

#define LIGHTCURVE_NOISE_WINDOWS 4
/* Window lengths in hours: 1, 3, 6, 13. */
extern const double lightcurve_noise_window_h[LIGHTCURVE_NOISE_WINDOWS];

struct lightcurve_noise {
    double point; /* relative; 1.4826 MAD of point-to-point differences / sqrt 2 */
    double window[LIGHTCURVE_NOISE_WINDOWS]; /* relative; robust scatter of window means of the
                                                trend-removed flux; NAN where windows are too few */
    double cadence_d;
};

/* Noise of trend-removed flux (about 1). After Pont, Zucker & Queloz 2006: the scatter of means
 * over the window holds the correlated part. A window needs at least half its points. */
bool lightcurve_noise_measure(const double *time, const double *flat, size_t n, double cadence_d,
                              double gap_d, struct lightcurve_noise *out, struct base_error *error);

/* Error (relative, one sigma) of the mean flux over a dip that lasts duration_d and holds
 * `points` >= 1 cadences: the windowed scatter interpolated in log length, never below
 * point / sqrt(points). Beyond the windows measured, what the nearest holds above white noise stays
 * and the white part goes on falling. NAN where the point noise is. */
double lightcurve_noise_of_mean(const struct lightcurve_noise *noise, double duration_d,
                                size_t points);

enum lightcurve_dip_shape { LIGHTCURVE_DIP_NONE, LIGHTCURVE_DIP_BOX, LIGHTCURVE_DIP_TRAPEZOID };

/* A measured dip. Errors are one sigma; NAN where a value could not be measured. */
struct lightcurve_dip {
    enum lightcurve_dip_shape shape; /* the fit that was kept; NONE: too little data */
    double mid_d, mid_error_d;
    double duration_d, duration_error_d; /* first to last contact, T14 */
    double ingress_fraction;             /* ingress time / T14, 0 (box) to 0.5 (V) */
    double depth, depth_error;           /* relative; negative for a bump */
    double level, slope;                 /* local level at mid_d and its slope per day */
    double snr;                          /* depth / error of the mean over the length at half
                                            depth; negative for a bump */
    double chi2, chi2_box;               /* of the kept fit and of the box */
    size_t points, points_in;            /* fitted, and inside T14 */
    double covered;                      /* fraction of T14 covered by data, 0 to 1 */
    double gap_distance_d; /* from T14's nearer end to the nearest gap or end of data */
    double v_shape;        /* 0 flat-bottomed, 1 V: 2 x ingress_fraction */
    double asymmetry;      /* (mean of second half - mean of first half) / depth */
};

/* Measure the dip in [starts_d, ends_d] of a light curve (time increasing; flux relative, trend
 * removed or not; error NULL or one-sigma relative, rescaled so that its median is noise->point).
 * Fits a box, then a trapezoid (mid, T14, ingress fraction, depth, level, slope) by weighted least
 * squares to the data within about 1.5 interval lengths (at least 0.3 d) either side; the box is
 * kept where the trapezoid is not better by more than its extra parameter deserves. Errors come
 * from the curvature at the optimum, scaled by the windowed noise so that correlated noise counts.
 * Never fails on numbers: shape NONE says that nothing could be measured (fewer than 3 points in
 * the interval or 10 around it, or a local level that is not positive). The fit stays near the
 * interval: a box of another length or place must earn what makes it a less likely meaning of the
 * mark. Where a dip has no data on one side the slope is not fitted and is 0. A dip is preferred to
 * a bump unless the interval itself stands high. Single points far above their neighbours, and
 * outliers well away from the interval, are left out; low points near it never are. The errors of
 * a box's duration and depth hold what an ingress that cannot be seen leaves open. Data of more
 * than 4,000 points are averaged down to about so many, so that the cost is bounded: about 1 ms.
 * Returns false only on BASE_MEMORY. */
bool lightcurve_dip_measure(const double *time, const double *flux, const double *error, size_t n,
                            double gap_d, double starts_d, double ends_d,
                            const struct lightcurve_noise *noise, struct lightcurve_dip *out,
                            struct base_error *err);

/* The trapezoid's relative flux at time t for the values in dip (shape is taken as trapezoid). */
double lightcurve_dip_model(const struct lightcurve_dip *dip, double time_d);

#endif
