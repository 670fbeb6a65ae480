/*
 * The parts of the dip fit: the points it takes, the search for the best box, and the trapezoid.
 * Private to the room.
 */
#ifndef EBBMARK_SERVER_LIGHTCURVE_DIP_H
#define EBBMARK_SERVER_LIGHTCURVE_DIP_H

#include <stdbool.h>
#include <stddef.h>

/* Where the fit may go: chosen from the marked interval. Times since dip_points.origin_d. */
struct dip_bounds {
    double starts_d, ends_d;              /* the marked interval */
    double mid_least_d, mid_most_d;       /* of the middle */
    double length_least_d, length_most_d; /* of a box; the trapezoid may be twice as long */
};

/* The points that are fitted. Arrays of `count` in one allocation that `time` begins. */
struct dip_points {
    size_t count;
    double origin_d;  /* subtracted from time: the weighted mean of the times */
    double cadence_d; /* of these points */
    bool slope;       /* data lie on both sides, so that a slope can be fitted */
    bool scaled;      /* the weights are 1 / sigma^2; false where no noise is known */
    double *time, *flux, *weight;
};

/* A box: points [first, end) lie in it. depth is a drop in flux units, negative for a bump. */
struct dip_box {
    bool found;
    size_t first, end;
    double starts_d, ends_d;
    double level, slope; /* of the line beside it: level at the origin */
    double depth, depth_error;
    double starts_error_d, ends_error_d;
    double chi2;
};

/* The parameters of a trapezoid and their order in covariances. */
enum { DIP_MID, DIP_LENGTH, DIP_INGRESS, DIP_DEPTH, DIP_LEVEL, DIP_SLOPE, DIP_PARAMETERS };
struct dip_trapezoid {
    bool found;
    double value[DIP_PARAMETERS];                      /* level is that at the middle */
    double covariance[DIP_PARAMETERS][DIP_PARAMETERS]; /* 0 for what was held; NAN where singular */
    double chi2;
};

/* The box within the bounds that takes most from chi2, with its errors. False when out of memory;
 * box->found is false where nothing takes anything. */
bool dip_box_search(const struct dip_points *points, const struct dip_bounds *bounds,
                    struct dip_box *box);

/* The best trapezoid that starts from a box, of the same sign, within the bounds. */
void dip_trapezoid_fit(const struct dip_points *points, const struct dip_bounds *bounds,
                       const struct dip_box *box, struct dip_trapezoid *out);

/* How far length and depth may be off because the ingress can hardly be seen: their root mean
 * square difference from what was kept, over trapezoids of every ingress fraction, each weighed by
 * exp(-chi2 / (2 unit)). A shape that the data pin down gives next to nothing here. */
struct dip_kept {
    double length_d, depth, chi2; /* depth in flux units */
};
void dip_trapezoid_spread(const struct dip_points *points, const struct dip_bounds *bounds,
                          const struct dip_box *box, const struct dip_kept *kept, double unit,
                          double *length_spread, double *depth_spread);

/* The trapezoid of unit depth: 0 outside, 1 on its floor. */
double dip_trapezoid_shape(double since_mid_d, double length_d, double ingress_fraction);

#endif
