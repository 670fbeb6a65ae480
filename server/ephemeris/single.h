/* The periods that a single dip may have. Private to the room. */
#ifndef EPHEMERIS_SINGLE_H
#define EPHEMERIS_SINGLE_H

#include "watch.h"

/* Fill series->range: the periods at which the dips that data should have shown, but did not, would
 * not be too many to have been missed. The ranges live in `arena`. BASE_MEMORY. */
bool single_ranges(const struct watch *watch, const struct ephemeris_link_rules *rules,
                   double mid_d, double duration_d, struct base_arena *arena,
                   struct ephemeris_series *series, struct base_error *error);

#endif
