/*
 * The transit model. The formulas are those of Mandel & Agol (2002, ApJ 580, L171), section 4 and
 * table 1, with the elliptic integrals written in Carlson's symmetric forms. Writing s = k + z and
 * d = k - z, and taking the third-kind integral at the reciprocal parameter (DLMF 19.21.12), turns
 * the terms that diverge and cancel at the contact points and at z = k into terms that vanish
 * there, so that the paper's special cases need no branch of their own.
 */
#include "ebbmark/transit.h"

#include <assert.h>
#include <gsl/gsl_sf_ellint.h>
#include <math.h>
#include <stdbool.h>

/* Below these, a disc, a distance from a contact or |k - z| changes nothing that a double holds. */
#define TRANSIT_RATIO_LEAST 1e-9
#define TRANSIT_NEAR_CONTACT 1e-30
#define TRANSIT_NEAR_CENTRE 1e-30

/* Where the disc stands. The four differences are taken from k and z at once, since 1 - s and
 * 1 - d lose all their digits at the contacts otherwise. */
struct overlap {
    double z, k;
    double s, d;            /* k + z, k - z */
    double over_s, under_d; /* s - 1, 1 - d */
    double area_term;       /* sqrt((1 - d^2) (s^2 - 1)), 0 when the disc is wholly inside */
    double behind, on_limb; /* half angles of the lens at the disc's and at the star's centre */
    bool inside;
};

static struct overlap overlap_at(double z, double k)
{
    struct overlap at = {.z = z, .k = k, .s = k + z, .d = k - z};
    at.over_s = (k - 1.0) + z;
    at.under_d = (1.0 - k) + z;
    at.inside = at.over_s <= 0.0;
    if (!at.inside) {
        double under = fmax(1.0 + at.d, 0.0); /* rounding can take it below at first contact */
        at.area_term = sqrt(at.under_d * under) * sqrt(at.over_s * (1.0 + at.s));
        at.behind = atan2(at.area_term, k * k + z * z - 1.0);
        at.on_limb = atan2(at.area_term, 1.0 - k * k + z * z);
    }
    return at;
}

/* The blocked share of a uniform disc. */
static double uniform_share(const struct overlap *at)
{
    if (at->inside)
        return at->k * at->k;
    return (at->k * at->k * at->behind + at->on_limb - 0.5 * at->area_term) / M_PI;
}

/* eta_d of table 1, which goes with the square of the distance from the star's centre. */
static double square_share(const struct overlap *at)
{
    double k2 = at->k * at->k, z2 = at->z * at->z;
    double whole = 0.5 * k2 * (k2 + 2.0 * z2);
    if (at->inside)
        return whole;
    return (at->on_limb + 2.0 * whole * at->behind - 0.25 * (1.0 + 5.0 * k2 + z2) * at->area_term) /
           (2.0 * M_PI);
}

/* Complete elliptic integrals at complementary parameter m1: (distance from contact) K, E, and
 * m1 RJ(0, m1, 1, m1 c). All stay finite as m1 goes to 0. */
struct elliptic {
    double k_term, e, j_term;
};

static struct elliptic elliptic_at(double m1, double contact, double c)
{
    struct elliptic at = {0.0, 1.0, 0.0};
    bool centred = c < TRANSIT_NEAR_CENTRE * TRANSIT_NEAR_CENTRE;
    if (m1 < TRANSIT_NEAR_CONTACT) {
        double root = sqrt(fmin(c, 1.0));
        if (!centred)
            at.j_term = root < 1.0 ? 3.0 * acos(root) / (root * sqrt(1.0 - root * root)) : 3.0;
        return at;
    }
    double first = gsl_sf_ellint_RF(0.0, m1, 1.0, GSL_PREC_DOUBLE);
    at.k_term = contact * first;
    at.e = first - (1.0 - m1) / 3.0 * gsl_sf_ellint_RD(0.0, m1, 1.0, GSL_PREC_DOUBLE);
    if (!centred)
        at.j_term = m1 * gsl_sf_ellint_RJ(0.0, m1, 1.0, m1 * c, GSL_PREC_DOUBLE);
    return at;
}

/* lambda_d + 2/3 Theta(k - z) of table 1: lambda_2 inside, lambda_1 across the limb. At z = k the
 * third-kind term jumps and Theta jumps back; half of each is exact there. */
static double limb_share(const struct overlap *at)
{
    double z = at->z, k = at->k, s = at->s, d = at->d;
    double a = d * d, b = s * s;
    double common = z * z + 7.0 * k * k - 4.0;
    double one_less_a = at->under_d * (1.0 + d), b_less_one = at->over_s * (1.0 + s);
    double share;
    if (at->inside) {
        double m1 = fmin(-b_less_one / one_less_a, 1.0);
        struct elliptic e = elliptic_at(m1, -b_less_one, a / b);
        share = (one_less_a - 3.0 * d / s) * e.k_term + one_less_a * common * e.e -
                4.0 * k * z * d / (s * b) * e.j_term;
        share *= 2.0 / (9.0 * M_PI * sqrt(one_less_a));
    } else {
        double m1 = fmin(b_less_one / (4.0 * k * z), 1.0);
        struct elliptic e = elliptic_at(m1, -b_less_one, a);
        share = (2.0 * b + a - 3.0 + 3.0 * s * d) * e.k_term + 4.0 * k * z * common * e.e -
                s * d * one_less_a * e.j_term;
        share /= 9.0 * M_PI * sqrt(k * z);
    }
    if (fabs(d) < TRANSIT_NEAR_CENTRE)
        return share + 1.0 / 3.0;
    return d > 0.0 ? share + 2.0 / 3.0 : share;
}

double ephemeris_transit_flux(double z, double k, double u1, double u2)
{
    double whole = 1.0 - u1 / 3.0 - u2 / 6.0;
    assert(k >= 0.0 && whole > 0.0);
    if (isnan(z))
        return NAN;
    assert(z >= 0.0);
    if (k < TRANSIT_RATIO_LEAST || z >= 1.0 + k)
        return 1.0;
    if (z <= k - 1.0)
        return 0.0;
    struct overlap at = overlap_at(z, k);
    double c2 = u1 + 2.0 * u2;
    double blocked = (1.0 - c2) * uniform_share(&at) + u2 * square_share(&at);
    if (c2 != 0.0)
        blocked += c2 * limb_share(&at);
    return 1.0 - blocked / whole;
}

/* The time from mid-transit at which the centres are `distance` stellar radii apart: 0 where they
 * never come so near, a quarter of the period where they are always nearer. */
static double half_time_d(const struct ephemeris_transit *transit, double distance)
{
    double ratio = transit->axis_ratio, b = transit->impact;
    if (distance <= b || b >= ratio)
        return 0.0;
    double sine = sqrt((distance - b) * (distance + b) / ((ratio - b) * (ratio + b)));
    return transit->period_d / (2.0 * M_PI) * asin(fmin(sine, 1.0));
}

double ephemeris_transit_duration_d(const struct ephemeris_transit *transit)
{
    return 2.0 * half_time_d(transit, 1.0 + transit->radius_ratio);
}

double ephemeris_transit_full_duration_d(const struct ephemeris_transit *transit)
{
    return 2.0 * half_time_d(transit, fabs(1.0 - transit->radius_ratio));
}

/* What is missing of the flux `since_d` after mid-transit (within a quarter of the period). */
static double missing(const struct ephemeris_transit *transit, double since_d)
{
    double phase = 2.0 * M_PI * since_d / transit->period_d;
    double across = transit->axis_ratio * sin(phase), along = transit->impact * cos(phase);
    return 1.0 - ephemeris_transit_flux(hypot(across, along), transit->radius_ratio, transit->u1,
                                        transit->u2);
}

/* Nodes and weights of the ten-point Gauss-Legendre rule on [-1, 1] (Abramowitz & Stegun, table
 * 25.4), one side. */
#define TRANSIT_NODES 5
static const double node[TRANSIT_NODES] = {0.14887433898163122, 0.43339539412924719,
                                           0.67940956829902441, 0.86506336668898451,
                                           0.97390652851717172};
static const double weight[TRANSIT_NODES] = {0.29552422471475287, 0.26926671930999636,
                                             0.21908636251598204, 0.14945134915058059,
                                             0.066671344308688138};

/* The integral of `missing` over [from, to], on which it has no kink inside. */
static double missing_smooth(const struct ephemeris_transit *transit, double from, double to)
{
    double middle = 0.5 * (from + to), half = 0.5 * (to - from), sum = 0.0;
    for (int i = 0; i < TRANSIT_NODES; i++)
        sum += weight[i] * (missing(transit, middle - half * node[i]) +
                            missing(transit, middle + half * node[i]));
    return half * sum;
}

/* The same over any interval: split at the contacts, where the curve has its kinks. The pieces next
 * to a contact are halved towards it, since the slope there is of the kind x ln x. */
static double missing_integral(const struct ephemeris_transit *transit, double from, double to,
                               double outer, double inner)
{
    double wide = 0.5 * (outer + inner), near = inner > 0.0 ? 0.75 * inner : 0.0;
    const double kink[] = {-outer, -wide, -inner, -near, near, inner, wide, outer};
    double sum = 0.0;
    for (size_t i = 0; i + 1 < sizeof kink / sizeof kink[0]; i++) {
        double low = fmax(from, kink[i]), high = fmin(to, kink[i + 1]);
        if (high > low)
            sum += missing_smooth(transit, low, high);
    }
    return sum;
}

/* Flux averaged over the exposure that is centred `since_d` after a mid-transit. */
static double exposed(const struct ephemeris_transit *transit, double since_d, double outer,
                      double inner)
{
    double half = 0.5 * transit->exposure_d, period = transit->period_d;
    double first = ceil((since_d - half - outer) / period);
    double transits = floor((since_d + half + outer) / period) - first + 1.0;
    double lost = 0.0;
    for (size_t i = 0; (double)i < transits; i++) {
        double mid = (first + (double)i) * period;
        lost += missing_integral(transit, since_d - half - mid, since_d + half - mid, outer, inner);
    }
    return 1.0 - lost / transit->exposure_d;
}

void ephemeris_transit_curve(const struct ephemeris_transit *transit, const double *time, size_t n,
                             double *flux)
{
    assert(transit->period_d > 0.0 && transit->axis_ratio > 1.0 && transit->radius_ratio >= 0.0 &&
           transit->impact >= 0.0 && transit->exposure_d >= 0.0);
    double outer = 0.5 * ephemeris_transit_duration_d(transit);
    double inner = 0.5 * ephemeris_transit_full_duration_d(transit);
    for (size_t i = 0; i < n; i++) {
        double since = remainder(time[i] - transit->mid_d, transit->period_d);
        if (outer <= 0.0)
            flux[i] = 1.0;
        else if (transit->exposure_d > 0.0)
            flux[i] = exposed(transit, since, outer, inner);
        else
            flux[i] = fabs(since) < outer ? 1.0 - missing(transit, since) : 1.0;
    }
}

/* GM and radius of the Sun, nominal (IAU 2015 Resolution B3), in m^3 s^-2 and m. */
#define SUN_GM 1.3271244e20
#define SUN_RADIUS 6.957e8
#define DAY_S 86400.0

double ephemeris_axis_ratio(double period_d, double density_solar)
{
    double turn = period_d * DAY_S / (2.0 * M_PI);
    return cbrt(SUN_GM * density_solar * turn * turn / (SUN_RADIUS * SUN_RADIUS * SUN_RADIUS));
}
