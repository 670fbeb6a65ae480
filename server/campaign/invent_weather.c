#include "invent_inside.h"

#include <gsl/gsl_randist.h>
#include <math.h>

#define PI 3.14159265358979323846
#define SPOTS 4

static void tell_lure(struct invent_star *star, double mid_d, double duration_d, const char *kind)
{
    if (star->lure_count < INVENT_LURES_MAX)
        star->lures[star->lure_count++] = (struct invent_lure){mid_d, duration_d, kind};
}

/* Dark spots that come and go on a turning star: each dims it while on the near side, by the cosine
 * of its angle to us, and lives for some turns. */
static void add_spots(struct invent_star *star, gsl_rng *random)
{
    bool active = gsl_rng_uniform(random) < 0.55;
    double turn_d = invent_log_uniform(random, 2.0, 22.0);
    double size = invent_log_uniform(random, 0.0015, 0.022);
    for (int s = 0; s < SPOTS; s++) {
        double phase = invent_uniform(random, 0.0, 2.0 * PI);
        double turn = turn_d * (1.0 + 0.04 * gsl_rng_uniform(random)); /* latitudes turn apart */
        double peak = INVENT_STARTS_D + invent_uniform(random, -5.0, INVENT_LENGTH_D + 5.0);
        double life = turn_d * invent_uniform(random, 1.5, 5.0);
        double darkness = size * invent_uniform(random, 0.3, 1.0) / 2.0;
        for (size_t i = 0; i < star->count && active; i++) {
            double near = cos(2.0 * PI * (star->time[i] - INVENT_STARTS_D) / turn + phase);
            double age = (star->time[i] - peak) / life;
            if (near > 0.0)
                star->signal[i] *= 1.0 - darkness * near * exp(-0.5 * age * age);
        }
    }
}

/* A star that never keeps still: two close pulsations that beat. */
static void add_pulsation(struct invent_star *star, gsl_rng *random)
{
    bool pulsates = gsl_rng_uniform(random) < 0.07;
    double period = invent_log_uniform(random, 0.25, 0.8);
    double size = invent_log_uniform(random, 0.001, 0.005);
    double other = period * invent_uniform(random, 1.04, 1.12);
    for (size_t i = 0; i < star->count && pulsates; i++) {
        double t = star->time[i] - INVENT_STARTS_D;
        star->signal[i] *=
            1.0 + size * (sin(2.0 * PI * t / period) + 0.6 * sin(2.0 * PI * t / other + 1.0));
    }
}

/* Flares of cool stars: up within half an hour, down over a few. */
static void add_flares(struct invent_star *star, gsl_rng *random)
{
    double rate = star->about.temperature_k < 4600.0 ? 4.0 : 0.25;
    unsigned count = gsl_ran_poisson(random, rate);
    for (unsigned f = 0; f < count; f++) {
        double peak = INVENT_STARTS_D + invent_uniform(random, 0.0, INVENT_LENGTH_D);
        double height = invent_log_uniform(random, 0.0015, 0.03);
        double fall_d = invent_log_uniform(random, 0.015, 0.09);
        for (size_t i = 0; i < star->count; i++) {
            double since = star->time[i] - peak;
            if (since > -INVENT_CADENCE_D && since < 8.0 * fall_d)
                star->signal[i] +=
                    height * (since < 0.0 ? 1.0 + since / INVENT_CADENCE_D : exp(-since / fall_d));
        }
    }
}

/* Two moments at which the same instrument fault dims the stars on one side of the field. */
static void add_shared_dips(struct invent_star *star, size_t index, gsl_rng *random)
{
    static const struct {
        double day, length_d, depth;
        size_t side; /* stars whose number leaves this over when divided by 3 */
    } faults[] = {{5.62, 0.21, 0.0021, 0}, {18.94, 0.33, 0.0016, 1}};
    for (size_t f = 0; f < sizeof faults / sizeof faults[0]; f++) {
        double depth = faults[f].depth * invent_uniform(random, 0.6, 1.4);
        double mid = INVENT_STARTS_D + faults[f].day;
        if (index % 3 != faults[f].side)
            continue;
        for (size_t i = 0; i < star->count; i++) {
            double x = (star->time[i] - mid) / faults[f].length_d;
            if (fabs(x) < 0.5)
                star->signal[i] *= 1.0 - depth * pow(cos(PI * x), 1.2);
        }
        if (invent_covers(star, mid))
            tell_lure(star, mid, faults[f].length_d, "instrument");
    }
}

/* After the common gap the mirror settles for hours, and before it some stars droop. */
static void add_ramps(struct invent_star *star, gsl_rng *random)
{
    bool settles = gsl_rng_uniform(random) < 0.3, droops = gsl_rng_uniform(random) < 0.12;
    double size = invent_log_uniform(random, 0.0012, 0.006);
    double time_d = invent_log_uniform(random, 0.08, 0.35);
    for (size_t i = 0; i < star->count; i++) {
        double after = star->time[i] - INVENT_GAP_ENDS_D;
        double before = INVENT_GAP_STARTS_D - star->time[i];
        if (settles && after >= 0.0)
            star->signal[i] *= 1.0 - size * exp(-after / time_d);
        if (droops && before >= 0.0)
            star->signal[i] *= 1.0 - size * exp(-before / time_d);
    }
    if (settles)
        tell_lure(star, INVENT_GAP_ENDS_D + 0.75 * time_d, 1.5 * time_d, "ramp");
    if (droops)
        tell_lure(star, INVENT_GAP_STARTS_D - 0.75 * time_d, 1.5 * time_d, "ramp");
}

/* A pixel loses sensitivity at once and recovers over hours. */
static void add_recovery(struct invent_star *star, gsl_rng *random)
{
    bool there = gsl_rng_uniform(random) < 0.14;
    double start = INVENT_STARTS_D + invent_uniform(random, 1.0, INVENT_LENGTH_D - 1.5);
    double size = star->white * invent_uniform(random, 3.0, 8.0);
    double time_d = invent_log_uniform(random, 0.06, 0.25);
    if (!there || !invent_covers(star, start + 0.5 * time_d))
        return;
    for (size_t i = 0; i < star->count; i++)
        if (star->time[i] >= start)
            star->signal[i] *= 1.0 - size * exp(-(star->time[i] - start) / time_d);
    tell_lure(star, start + time_d, 2.0 * time_d, "recovery");
}

void invent_weather_add(struct invent_star *star, size_t index, gsl_rng *random)
{
    add_spots(star, random);
    add_pulsation(star, random);
    add_flares(star, random);
    add_shared_dips(star, index, random);
    add_ramps(star, random);
    add_recovery(star, random);
}
