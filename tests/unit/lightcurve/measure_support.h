/* Invented data for the tests of measuring: a generator whose numbers are the same everywhere. */
#ifndef EBBMARK_TESTS_MEASURE_SUPPORT_H
#define EBBMARK_TESTS_MEASURE_SUPPORT_H

#include <math.h>
#include <stdint.h>

struct dice {
    uint64_t state;
};

/* Uniform in (0, 1): splitmix64 (Steele, Lea & Flood 2014). */
static inline double dice_uniform(struct dice *dice)
{
    uint64_t z = dice->state += 0x9e3779b97f4a7c15u;
    z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9u;
    z = (z ^ (z >> 27)) * 0x94d049bb133111ebu;
    return ((double)((z ^ (z >> 31)) >> 11) + 0.5) * 0x1p-53;
}

/* Normal with mean 0 and deviation 1 (Box & Muller 1958). */
static inline double dice_normal(struct dice *dice)
{
    double radius = sqrt(-2.0 * log(dice_uniform(dice)));
    return radius * cos(6.283185307179586 * dice_uniform(dice));
}

#endif
