/*
 * The parts of the dip fit: the points it takes, the search for the best box, and the trapezoid.
 * Private to the room.
 */
#ifndef EBBMARK_SERVER_LIGHTCURVE_DIP_H
#define EBBMARK_SERVER_LIGHTCURVE_DIP_H

#include "ebbmark/lightcurve_measure.h"

#define DIP_POINTS_LEAST 10 /* fewer points in all are not fitted */

/* What was asked for. */
struct dip_task {
    const double *time, *flux, *error;
    size_t n;
    double gap_d, starts_d, ends_d;
    const struct lightcurve_noise *noise;
    double cadence_d;
    size_t first, end; /* points taken: [first, end) */
};

/* Where the fit may go: chosen from the marked interval. Times since dip_points.origin_d. */
struct dip_bounds {
    double starts_d, ends_d;              /* the marked interval */
    double mid_least_d, mid_most_d;       /* of the middle */
    double length_least_d, length_most_d; /* of a box; the trapezoid may be twice as long */
};

/* Sums over a range of points. */
struct dip_sums {
    double w, wt, wtt, wf, wft, wff;
};

/* The points that are fitted. Owned by the struct; free with dip_points_free. */
struct dip_points {
    size_t count;
    double origin_d;              /* subtracted from time: the weighted mean of the times */
    double base;                  /* subtracted from flux: its weighted mean */
    double cadence_d;             /* of these points */
    bool slope;                   /* data lie on both sides, so that a slope can be fitted */
    bool scaled;                  /* the weights are 1 / sigma^2; false where no noise is known */
    double *time, *flux, *weight; /* one allocation that `time` begins */
    struct dip_sums *total;       /* count + 1: of the points before each */
};

/* Choose the points: the interval and its surroundings as far as the nearest gap. False when they
 * are too few. */
bool dip_points_choose(struct dip_task *task);

/* Gather the chosen points but for outliers, averaged down where they are very many; sets
 * task->cadence_d. False when out of memory; free the points in any case. */
bool dip_points_gather(struct dip_task *task, struct dip_points *points);
void dip_points_free(struct dip_points *points);

/* A box: points [first, end) lie in it. depth is a drop in flux units, negative for a bump. */
struct dip_box {
    bool found;
    size_t first, end;
    double starts_d, ends_d;
    double level, slope; /* of the line beside it: level at the origin, less the base */
    double depth, depth_error;
    double starts_error_d, ends_error_d;
    double chi2;
};

/* The parameters of a trapezoid and their order in covariances. */
enum { DIP_MID, DIP_LENGTH, DIP_INGRESS, DIP_DEPTH, DIP_LEVEL, DIP_SLOPE, DIP_PARAMETERS };
struct dip_trapezoid {
    bool found;
    double value[DIP_PARAMETERS]; /* level is that at the middle, less the base */
    double covariance[DIP_PARAMETERS][DIP_PARAMETERS]; /* 0 for what was held; NAN where singular */
    double chi2;
};

/* The box within the bounds that takes most from chi2, with its errors; box->found is false where
 * nothing takes anything. */
void dip_box_search(const struct dip_points *points, const struct dip_bounds *bounds,
                    struct dip_box *box);

/* The best trapezoid that starts from a box, of the same sign, within the bounds. */
void dip_trapezoid_fit(const struct dip_points *points, const struct dip_bounds *bounds,
                       const struct dip_box *box, struct dip_trapezoid *out);

/* What was kept, and how far its numbers may be off because the ingress can hardly be seen: their
 * root mean square difference from trapezoids of every ingress fraction, each weighed by
 * exp(-chi2 / (2 unit)). A shape that the data pin down gives next to nothing here. */
struct dip_kept {
    double mid_d, length_d, depth, chi2; /* mid since the origin; depth in flux units */
};
struct dip_spread {
    double mid_d, length_d, depth;
};
struct dip_spread dip_trapezoid_spread(const struct dip_points *points,
                                       const struct dip_bounds *bounds, const struct dip_box *box,
                                       const struct dip_kept *kept, double unit);

/* The trapezoid of unit depth: 0 outside, 1 on its floor. */
double dip_trapezoid_shape(double since_mid_d, double length_d, double ingress_fraction);

#endif
