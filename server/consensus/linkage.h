/*
 * Average-linkage clustering of things whose distances stand in a matrix. Private to the room.
 */
#ifndef CONSENSUS_LINKAGE_H
#define CONSENSUS_LINKAGE_H

#include <stdbool.h>
#include <stddef.h>

/* Merge, nearest first, the n clusters of the given sizes (>= 1) until no two are at most `cut`
 * apart; the distance of merged clusters is the average weighted by sizes, and INFINITY between any
 * two of their parts keeps them apart for good. `distance` is n x n, symmetric, and is used up, and
 * so is `size`. cluster[i] becomes the lowest index that i is merged with. Ties go to the lower
 * index. Time n^2. False when out of memory. */
bool linkage_average(double *distance, size_t *size, size_t n, double cut, size_t *cluster);

#endif
