/*
 * The trapezoid fit: Levenberg-Marquardt in all six parameters with exact derivatives, from several
 * ingress fractions, since chi2 has kinks where a contact passes a point. Where the shape is
 * constant, outside and on the floor, sums come from the points' running totals; only the points on
 * the ramps are visited.
 */
#include <math.h>
#include <string.h>

#include "dip.h"
#include "robust.h"

#define ROUNDS_MOST 100
#define SHAKES_MOST 4
#define SPREAD_STEPS 10
#define SHAKE_LEAST 1e-3 /* a smaller gain in chi2 ends the shaking */
#define SETTLED 1e-10    /* relative change of chi2 that ends the rounds */
#define DAMPING_MOST 1e12
/* How far the trapezoid may be from the best box, in the box's length. For a V the best box is two
 * thirds of it long, for a box-like dip it is the dip. */
#define MID_OFF 0.5
#define LENGTH_LEAST 0.6
#define LENGTH_MOST 2.2
#define INGRESS_SEEN 0.25 /* an ingress of more than this share counts even in few points */

static const double first_ingress[] = {0.05, 0.15, 0.3, 0.48};
#define STARTS (sizeof first_ingress / sizeof first_ingress[0])

typedef double matrix[DIP_PARAMETERS][DIP_PARAMETERS];
typedef double vector[DIP_PARAMETERS];

struct limits {
    vector least, most;
};

double dip_trapezoid_shape(double since_mid_d, double length_d, double ingress_fraction)
{
    double inside = 0.5 * length_d - fabs(since_mid_d), ramp = ingress_fraction * length_d;
    if (inside <= 0.0)
        return 0.0;
    return inside >= ramp ? 1.0 : inside / ramp;
}

/* chi2 with the normal matrix (lower triangle) and the gradient's descent direction. */
struct slope_of_chi2 {
    double chi2;
    matrix normal;
    vector down;
};

/* Add the points [first, end), over all of which the shape is `shape`, 0 or 1. */
static void add_constant(const struct dip_points *points, const vector p, size_t first, size_t end,
                         double shape, struct slope_of_chi2 *at)
{
    const struct dip_sums *from = &points->total[first], *to = &points->total[end];
    double mid = p[DIP_MID], level = p[DIP_LEVEL] - p[DIP_DEPTH] * shape, slope = p[DIP_SLOPE];
    double w = to->w - from->w, wt = to->wt - from->wt, wf = to->wf - from->wf;
    double ws = wt - mid * w; /* s: time since the middle */
    double wss = to->wtt - from->wtt - 2.0 * mid * wt + mid * mid * w;
    double wfs = to->wft - from->wft - mid * wf;
    double r = wf - level * w - slope * ws, rs = wfs - level * ws - slope * wss;
    at->chi2 += to->wff - from->wff - level * wf - slope * wfs - level * r - slope * rs;
    at->down[DIP_MID] -= slope * r;
    at->down[DIP_DEPTH] -= shape * r;
    at->down[DIP_LEVEL] += r;
    at->normal[DIP_MID][DIP_MID] += slope * slope * w;
    at->normal[DIP_DEPTH][DIP_MID] += slope * shape * w;
    at->normal[DIP_DEPTH][DIP_DEPTH] += shape * w;
    at->normal[DIP_LEVEL][DIP_MID] -= slope * w;
    at->normal[DIP_LEVEL][DIP_DEPTH] -= shape * w;
    at->normal[DIP_LEVEL][DIP_LEVEL] += w;
    if (points->slope) {
        at->down[DIP_SLOPE] += rs;
        at->normal[DIP_SLOPE][DIP_MID] -= slope * ws;
        at->normal[DIP_SLOPE][DIP_DEPTH] -= shape * ws;
        at->normal[DIP_SLOPE][DIP_LEVEL] += ws;
        at->normal[DIP_SLOPE][DIP_SLOPE] += wss;
    }
}

/* Add the points [first, end), which lie on a ramp. */
static void add_ramp(const struct dip_points *points, const vector p, size_t first, size_t end,
                     struct slope_of_chi2 *at)
{
    double ramp = p[DIP_INGRESS] * p[DIP_LENGTH];
    for (size_t i = first; i < end; i++) {
        double since = points->time[i] - p[DIP_MID], w = points->weight[i];
        double shape = dip_trapezoid_shape(since, p[DIP_LENGTH], p[DIP_INGRESS]);
        double line = p[DIP_LEVEL] + p[DIP_SLOPE] * since;
        double r = points->flux[i] - line + p[DIP_DEPTH] * shape;
        vector slope_of = {[DIP_MID] = -p[DIP_SLOPE] - p[DIP_DEPTH] * copysign(1.0, since) / ramp,
                           [DIP_LENGTH] = -p[DIP_DEPTH] * (0.5 / ramp - shape / p[DIP_LENGTH]),
                           [DIP_INGRESS] = p[DIP_DEPTH] * shape / p[DIP_INGRESS],
                           [DIP_DEPTH] = -shape,
                           [DIP_LEVEL] = 1.0,
                           [DIP_SLOPE] = points->slope ? since : 0.0};
        at->chi2 += w * r * r;
        for (int a = 0; a < DIP_PARAMETERS; a++) {
            at->down[a] += w * r * slope_of[a];
            for (int b = 0; b <= a; b++)
                at->normal[a][b] += w * slope_of[a] * slope_of[b];
        }
    }
}

static void look_at(const struct dip_points *points, const vector p, struct slope_of_chi2 *at)
{
    double half = 0.5 * p[DIP_LENGTH], floor = half - p[DIP_INGRESS] * p[DIP_LENGTH];
    const double contact[] = {-half, -floor, floor, half};
    size_t edge[6] = {0};
    edge[5] = points->count;
    for (int c = 0; c < 4; c++)
        edge[c + 1] =
            lightcurve_first_not_before(points->time, 0, points->count, p[DIP_MID] + contact[c]);
    *at = (struct slope_of_chi2){0};
    add_constant(points, p, edge[0], edge[1], 0.0, at);
    add_ramp(points, p, edge[1], edge[2], at);
    add_constant(points, p, edge[2], edge[3], 1.0, at);
    add_ramp(points, p, edge[3], edge[4], at);
    add_constant(points, p, edge[4], edge[5], 0.0, at);
    at->chi2 = fmax(at->chi2, 0.0); /* rounding */
}

/* Cholesky factor in place of the lower triangle, leaving out parameters that are held. False when
 * the matrix is not positive definite. */
static bool factorise(matrix m, const bool held[DIP_PARAMETERS])
{
    for (int a = 0; a < DIP_PARAMETERS; a++)
        for (int b = 0; b <= a; b++) {
            if (held[a] || held[b]) {
                m[a][b] = a == b ? 1.0 : 0.0;
                continue;
            }
            double sum = m[a][b], whole = fabs(m[a][b]);
            for (int c = 0; c < b; c++)
                sum -= m[a][c] * m[b][c];
            if (a == b && !(sum > 1e-13 * whole))
                return false;
            m[a][b] = a == b ? sqrt(sum) : sum / m[b][b];
        }
    return true;
}

/* Solve factor factor^T x = right side, in place; the factor stays as it is. */
static void back_substitute(matrix factor, vector x)
{
    for (int a = 0; a < DIP_PARAMETERS; a++) {
        for (int b = 0; b < a; b++)
            x[a] -= factor[a][b] * x[b];
        x[a] /= factor[a][a];
    }
    for (int a = DIP_PARAMETERS - 1; a >= 0; a--) {
        for (int b = a + 1; b < DIP_PARAMETERS; b++)
            x[a] -= factor[b][a] * x[b];
        x[a] /= factor[a][a];
    }
}

/* Hold what stands at a limit and would go past it, and the slope where none is fitted. */
static void find_held(const struct dip_points *points, const struct limits *limits, const vector p,
                      const vector down, bool held[DIP_PARAMETERS])
{
    for (int a = 0; a < DIP_PARAMETERS; a++)
        held[a] = (p[a] <= limits->least[a] && down[a] <= 0.0) ||
                  (p[a] >= limits->most[a] && down[a] >= 0.0);
    held[DIP_SLOPE] = held[DIP_SLOPE] || !points->slope;
}

/* One damped step from p, kept inside the limits. False when it cannot be computed. */
static bool step_from(const vector p, matrix normal, const vector down,
                      const bool held[DIP_PARAMETERS], double damping, const struct limits *limits,
                      vector next)
{
    matrix damped;
    vector step;
    memcpy(damped, normal, sizeof damped);
    for (int a = 0; a < DIP_PARAMETERS; a++) {
        damped[a][a] *= 1.0 + damping;
        step[a] = held[a] ? 0.0 : down[a];
    }
    if (!factorise(damped, held))
        return false;
    back_substitute(damped, step);
    for (int a = 0; a < DIP_PARAMETERS; a++)
        next[a] = fmin(fmax(p[a] + step[a], limits->least[a]), limits->most[a]);
    return true;
}

/* Walk p downhill; returns chi2 there. */
static double descend(const struct dip_points *points, const struct limits *limits, vector p)
{
    struct slope_of_chi2 here, there;
    vector next;
    bool held[DIP_PARAMETERS];
    double damping = 1e-3;
    look_at(points, p, &here);
    for (int round = 0; round < ROUNDS_MOST && damping < DAMPING_MOST; round++) {
        find_held(points, limits, p, here.down, held);
        there.chi2 = INFINITY;
        if (step_from(p, here.normal, here.down, held, damping, limits, next))
            look_at(points, next, &there);
        if (!(there.chi2 < here.chi2)) {
            damping *= 10.0;
            continue;
        }
        bool settled = here.chi2 - there.chi2 <= SETTLED * here.chi2 && damping <= 1e-3;
        memcpy(p, next, sizeof next);
        here = there;
        damping = fmax(damping * 0.1, 1e-12);
        if (settled)
            break;
    }
    return here.chi2;
}

/* The covariance at out->value. Where points are missing on the floor or on the ramps, ingress and
 * depth or length cannot be told apart; the ingress is then held where it is. */
static void find_covariance(const struct dip_points *points, const struct limits *limits,
                            struct dip_trapezoid *out)
{
    struct slope_of_chi2 here;
    matrix factor;
    bool held[DIP_PARAMETERS];
    look_at(points, out->value, &here);
    find_held(points, limits, out->value, here.down, held);
    memcpy(factor, here.normal, sizeof factor);
    bool regular = factorise(factor, held);
    if (!regular && !held[DIP_INGRESS]) {
        held[DIP_INGRESS] = true;
        memcpy(factor, here.normal, sizeof factor);
        regular = factorise(factor, held);
    }
    for (int a = 0; a < DIP_PARAMETERS; a++) {
        vector column = {0};
        column[a] = 1.0;
        if (regular)
            back_substitute(factor, column);
        for (int b = 0; b < DIP_PARAMETERS; b++)
            out->covariance[a][b] = held[a] || held[b] ? 0.0 : regular ? column[b] : NAN;
    }
}

static struct limits limits_of(const struct dip_points *points, const struct dip_bounds *bounds,
                               const struct dip_box *box)
{
    struct limits limits;
    for (int a = 0; a < DIP_PARAMETERS; a++) {
        limits.least[a] = -INFINITY;
        limits.most[a] = INFINITY;
    }
    double width = box->ends_d - box->starts_d, mid = 0.5 * (box->starts_d + box->ends_d);
    limits.least[DIP_MID] = fmax(mid - MID_OFF * width, bounds->mid_least_d);
    limits.most[DIP_MID] = fmin(mid + MID_OFF * width, bounds->mid_most_d);
    limits.least[DIP_LENGTH] = LENGTH_LEAST * width;
    limits.most[DIP_LENGTH] = LENGTH_MOST * width;
    double least = points->cadence_d / width;
    limits.least[DIP_INGRESS] = fmin(least, INGRESS_SEEN); /* shorter than a cadence is not seen */
    limits.most[DIP_INGRESS] = 0.5;
    return limits;
}

static void clamp(const struct limits *limits, vector p)
{
    for (int a = 0; a < DIP_PARAMETERS; a++)
        p[a] = fmin(fmax(p[a], limits->least[a]), limits->most[a]);
}

/* A start with the box's middle, level and depth, as wide as the box at half its depth. */
static void start_from(const struct dip_box *box, double ingress, vector p)
{
    double mid = 0.5 * (box->starts_d + box->ends_d);
    p[DIP_MID] = mid;
    p[DIP_LENGTH] = (box->ends_d - box->starts_d) / (1.0 - ingress);
    p[DIP_INGRESS] = ingress;
    p[DIP_DEPTH] = box->depth;
    p[DIP_LEVEL] = box->level + box->slope * mid;
    p[DIP_SLOPE] = box->slope;
}

/* Walk down from p and keep where that ends, if it is better, of the sign of the box and has an
 * ingress that can be seen. Returns by how much chi2 fell. */
static double try_from(const struct dip_points *points, const struct limits *limits,
                       const struct dip_box *box, vector p, struct dip_trapezoid *out)
{
    clamp(limits, p);
    double chi2 = descend(points, limits, p), fell = out->chi2 - chi2;
    if (!(fell > 0.0) || !(p[DIP_DEPTH] * box->depth > 0.0) ||
        p[DIP_INGRESS] <= limits->least[DIP_INGRESS])
        return 0.0;
    out->found = true;
    out->chi2 = chi2;
    memcpy(out->value, p, sizeof(vector));
    return fell;
}

/* Start again from half an error away in middle, length and ingress, with every combination of
 * signs, until that finds nothing better: the kinks make hollows beside the deepest one. */
static void shake(const struct dip_points *points, const struct limits *limits,
                  const struct dip_box *box, struct dip_trapezoid *out)
{
    double fell = INFINITY;
    for (int turn = 0; turn < SHAKES_MOST && fell > SHAKE_LEAST; turn++) {
        vector from, off;
        find_covariance(points, limits, out);
        memcpy(from, out->value, sizeof from);
        for (int a = DIP_MID; a <= DIP_INGRESS; a++) {
            double variance = out->covariance[a][a];
            double unit = a == DIP_INGRESS ? 1.0 : from[DIP_LENGTH];
            off[a] = variance > 0.0 ? fmin(0.5 * sqrt(variance), 0.1 * unit) : 0.02 * unit;
        }
        fell = 0.0;
        for (int signs = 0; signs < 8; signs++) {
            vector p;
            memcpy(p, from, sizeof p);
            for (int a = DIP_MID; a <= DIP_INGRESS; a++)
                p[a] += (signs >> a & 1) != 0 ? off[a] : -off[a];
            fell += try_from(points, limits, box, p, out);
        }
    }
    find_covariance(points, limits, out);
}

void dip_trapezoid_fit(const struct dip_points *points, const struct dip_bounds *bounds,
                       const struct dip_box *box, struct dip_trapezoid *out)
{
    struct limits limits = limits_of(points, bounds, box);
    *out = (struct dip_trapezoid){.chi2 = INFINITY};
    for (size_t s = 0; s < STARTS; s++) {
        vector p;
        start_from(box, first_ingress[s], p);
        try_from(points, &limits, box, p, out);
    }
    if (out->found)
        shake(points, &limits, box, out);
}

struct dip_spread dip_trapezoid_spread(const struct dip_points *points,
                                       const struct dip_bounds *bounds, const struct dip_box *box,
                                       const struct dip_kept *kept, double unit)
{
    struct dip_spread sum = {0};
    struct limits limits = limits_of(points, bounds, box);
    double weights = 1.0;
    vector p;
    start_from(box, 0.0, p);
    for (int step = 1; step <= SPREAD_STEPS; step++) {
        double ingress = 0.5 * step / SPREAD_STEPS;
        limits.least[DIP_INGRESS] = limits.most[DIP_INGRESS] = ingress;
        p[DIP_LENGTH] *= (1.0 - p[DIP_INGRESS]) / (1.0 - ingress); /* as wide at half depth */
        clamp(&limits, p);
        double worse = descend(points, &limits, p) - kept->chi2;
        double weight = exp(-0.5 * fmax(worse / unit, 0.0));
        double later = p[DIP_MID] - kept->mid_d, longer = p[DIP_LENGTH] - kept->length_d;
        double deeper = p[DIP_DEPTH] - kept->depth;
        weights += weight;
        sum.mid_d += weight * later * later;
        sum.length_d += weight * longer * longer;
        sum.depth += weight * deeper * deeper;
    }
    return (struct dip_spread){sqrt(sum.mid_d / weights), sqrt(sum.length_d / weights),
                               sqrt(sum.depth / weights)};
}
