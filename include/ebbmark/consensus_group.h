/*
 * Grouping marks: which boxes are about the same thing. Pure, deterministic, thread-safe.
 */
#ifndef EBBMARK_CONSENSUS_GROUP_H
#define EBBMARK_CONSENSUS_GROUP_H

#include <stddef.h>
#include <stdint.h>

#include "ebbmark/error.h"

#define CONSENSUS_GROUP_CUT 0.75     /* average 1 - IoU at which a merge stops */
#define CONSENSUS_GROUP_RUN_MAX 2000 /* a longer run of overlapping marks is split by a sweep */

/* One mark. All marks given to one call are of one star and one time reference. */
struct consensus_mark {
    int64_t id;              /* the store's mark id; ascending ids are older */
    int64_t review;          /* marks of one review never share a group */
    int32_t person;          /* index of the reviewer, from 0 */
    double starts_d, ends_d; /* finite, starts < ends */
    double weight;           /* >= 0; skill, 1 where unknown: weighs the medians */
    int8_t sure;             /* 1 sure, 0 unsure */
};

/* Sort marks by (starts, ends, id) and give each a group number, 0 … *groups-1, in order of the
 * groups' starts: sorted[i] is an index into marks, group[i] the group of marks[sorted[i]]. Both
 * arrays hold n values and belong to the caller. Average linkage on 1 - IoU within each run of
 * overlapping marks, cut at CONSENSUS_GROUP_CUT, never two marks of one review in one group; ties
 * are broken by order, so the answer depends on the marks alone. Runs longer than
 * CONSENSUS_GROUP_RUN_MAX are split first by a density sweep. BASE_MEMORY on failure. */
bool consensus_group_marks(const struct consensus_mark *marks, size_t n, size_t *sorted,
                           size_t *group, size_t *groups, struct base_error *error);

/* Weighted median of values (n >= 1): the lower of the two middle values on a tie. Scratch order
 * of the arrays is changed. */
double consensus_weighted_median(double *values, double *weights, size_t n);

#endif
