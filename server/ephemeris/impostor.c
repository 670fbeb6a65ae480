#include "ebbmark/impostor.h"

#include <assert.h>
#include <gsl/gsl_cdf.h>
#include <math.h>

const struct ephemeris_match_rules ephemeris_match_rules_usual = {
    .ratio_most = 4, .period_tolerance = 1e-4, .phase_tolerance_d = 0.05, .sigma = 3.0};

void ephemeris_depth_agreement(const double *depth, const double *error, size_t n,
                               struct ephemeris_depth_agreement *out)
{
    assert(n >= 1);
    double weight = 0.0, sum = 0.0;
    for (size_t i = 0; i < n; i++) {
        weight += 1.0 / (error[i] * error[i]);
        sum += depth[i] / (error[i] * error[i]);
    }
    *out = (struct ephemeris_depth_agreement){
        .mean = sum / weight, .mean_error = sqrt(1.0 / weight), .p = NAN};
    for (size_t i = 0; i < n; i++)
        out->chi2 += pow((depth[i] - out->mean) / error[i], 2.0);
    if (n >= 2)
        out->p = gsl_cdf_chisq_Q(out->chi2, (double)(n - 1));
}

/* Weighted mean and chi2 of the depths at cycles of one parity. */
static size_t parity_mean(const double *depth, const double *error, const int64_t *cycle, size_t n,
                          bool odd, double *mean, double *mean_error, double *chi2)
{
    double weight = 0.0, sum = 0.0;
    size_t count = 0;
    for (size_t i = 0; i < n; i++)
        if ((cycle[i] % 2 != 0) == odd) {
            weight += 1.0 / (error[i] * error[i]);
            sum += depth[i] / (error[i] * error[i]);
            count++;
        }
    *mean = count > 0 ? sum / weight : NAN;
    *mean_error = count > 0 ? sqrt(1.0 / weight) : NAN;
    for (size_t i = 0; i < n; i++)
        if ((cycle[i] % 2 != 0) == odd)
            *chi2 += pow((depth[i] - *mean) / error[i], 2.0);
    return count;
}

void ephemeris_odd_even(const double *depth, const double *error, const int64_t *cycle, size_t n,
                        struct ephemeris_odd_even *out)
{
    double chi2 = 0.0, scale = 1.0;
    *out = (struct ephemeris_odd_even){.sigma = NAN};
    out->odds = parity_mean(depth, error, cycle, n, true, &out->odd_depth, &out->odd_error, &chi2);
    out->evens =
        parity_mean(depth, error, cycle, n, false, &out->even_depth, &out->even_error, &chi2);
    size_t means = (out->odds > 0 ? 1U : 0U) + (out->evens > 0 ? 1U : 0U);
    if (n > means)
        scale = fmax(1.0, sqrt(chi2 / (double)(n - means)));
    out->odd_error *= scale;
    out->even_error *= scale;
    if (means == 2)
        out->sigma =
            fabs(out->odd_depth - out->even_depth) / hypot(out->odd_error, out->even_error);
}

/* ---- known ephemerides ---- */

static unsigned common_divisor(unsigned a, unsigned b)
{
    while (b != 0) {
        unsigned rest = a % b;
        a = b;
        b = rest;
    }
    return a;
}

/* Whether the line's period is times / of the known one, and their dips fall together. The step
 * that both share is the line's period / times; it is taken from whichever is known better. */
static bool try_ratio(const struct ephemeris_line *line, const struct ephemeris_known *known,
                      const struct ephemeris_match_rules *rules, struct ephemeris_match *match)
{
    double step = line->period_d / match->times, step_error = line->period_error_d / match->times;
    double known_step = known->period_d / match->of;
    double known_error = known->period_error_d / match->of;
    if (fabs(step - known_step) >
        rules->period_tolerance * known_step + rules->sigma * hypot(step_error, known_error))
        return false;
    if (known_error <= step_error) {
        step = known_step;
        step_error = known_error;
    }
    double since = line->epoch_d - known->epoch_d;
    double error = hypot(hypot(line->epoch_error_d, known->epoch_error_d),
                         nearbyint(since / step) * step_error);
    double allowed = rules->phase_tolerance_d + rules->sigma * error;
    match->phase_off_d = remainder(since, step);
    match->phase_chance = fmin(2.0 * allowed / step, 1.0);
    return fabs(match->phase_off_d) <= allowed;
}

static bool is_better(const struct ephemeris_match *a, const struct ephemeris_match *b)
{
    if (a->times + a->of != b->times + b->of)
        return a->times + a->of < b->times + b->of;
    return fabs(a->phase_off_d) < fabs(b->phase_off_d);
}

bool ephemeris_known_match(const struct ephemeris_line *line, const struct ephemeris_known *known,
                           size_t count, const struct ephemeris_match_rules *rules,
                           struct ephemeris_match *out)
{
    assert(line->period_d > 0.0);
    bool found = false;
    for (size_t i = 0; i < count; i++) {
        if (!isfinite(known[i].period_d) || !(known[i].period_d > 0.0) ||
            !isfinite(known[i].epoch_d) || !(known[i].period_error_d >= 0.0) ||
            !(known[i].epoch_error_d >= 0.0))
            continue;
        for (unsigned times = 1; times <= rules->ratio_most; times++)
            for (unsigned of = 1; of <= rules->ratio_most; of++) {
                struct ephemeris_match match = {.index = i,
                                                .times = times,
                                                .of = of,
                                                .period_ratio = line->period_d / known[i].period_d};
                if (common_divisor(times, of) == 1 && try_ratio(line, &known[i], rules, &match) &&
                    (!found || is_better(&match, out))) {
                    *out = match;
                    found = true;
                }
            }
    }
    return found;
}
