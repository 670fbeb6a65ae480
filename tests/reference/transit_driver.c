/*
 * Prints what the transit model gives: for tests/reference/transit.py. Reads lines from stdin:
 *   flux Z K U1 U2                                        -> the flux
 *   orbit PERIOD MID K AXIS IMPACT U1 U2 EXPOSURE         -> T14 and T23 in d; sets the orbit
 *   at TIME                                               -> the flux of the orbit set last
 *   axis PERIOD DENSITY                                   -> a / R*
 */
#include <stdio.h>
#include <stdlib.h>

#include "ebbmark/transit.h"

static void answer(const char *line, struct ephemeris_transit *orbit)
{
    double z, k, u1, u2, time, flux, period, density;
    if (sscanf(line, "flux %lf %lf %lf %lf", &z, &k, &u1, &u2) == 4) {
        printf("%.17g\n", ephemeris_transit_flux(z, k, u1, u2));
    } else if (sscanf(line, "orbit %lf %lf %lf %lf %lf %lf %lf %lf", &orbit->period_d,
                      &orbit->mid_d, &orbit->radius_ratio, &orbit->axis_ratio, &orbit->impact,
                      &orbit->u1, &orbit->u2, &orbit->exposure_d) == 8) {
        printf("%.17g %.17g\n", ephemeris_transit_duration_d(orbit),
               ephemeris_transit_full_duration_d(orbit));
    } else if (sscanf(line, "at %lf", &time) == 1) {
        ephemeris_transit_curve(orbit, &time, 1, &flux);
        printf("%.17g\n", flux);
    } else if (sscanf(line, "axis %lf %lf", &period, &density) == 2) {
        printf("%.17g\n", ephemeris_axis_ratio(period, density));
    } else {
        fprintf(stderr, "transit_driver: not understood: %s", line);
        exit(1);
    }
}

int main(void)
{
    struct ephemeris_transit orbit = {0};
    char line[512];
    while (fgets(line, sizeof line, stdin) != NULL)
        answer(line, &orbit);
    return ferror(stdin) || fflush(stdout) != 0;
}
