/*
 * Intervals of rates. Private to the room.
 */
#ifndef CONSENSUS_INTERVAL_H
#define CONSENSUS_INTERVAL_H

/* The p quantile of the Beta distribution with a, b > 0, to 1e-12 absolute: bisection with secant
 * steps on the cumulative distribution, because the library's own inverse gives up on narrow and on
 * very skewed ones. */
double interval_beta_quantile(double p, double a, double b);

#endif
