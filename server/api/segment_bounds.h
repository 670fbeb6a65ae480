/*
 * Where segments begin and end: remembered, so that taking a review asks the store for it only the
 * first time. A segment never changes, so nothing here grows old.
 *
 * Thread-safe.
 */
#ifndef API_SEGMENT_BOUNDS_H
#define API_SEGMENT_BOUNDS_H

#include <stdbool.h>
#include <stdint.h>

struct segment_bounds;

/* NULL when out of memory. */
struct segment_bounds *segment_bounds_new(void);
void segment_bounds_free(struct segment_bounds *bounds);

/* False when this segment is not remembered (any more). */
bool segment_bounds_find(struct segment_bounds *bounds, int64_t segment, double *starts_d,
                         double *ends_d);
void segment_bounds_put(struct segment_bounds *bounds, int64_t segment, double starts_d,
                        double ends_d);

#endif
