#include "segment_bounds.h"

#include <pthread.h>
#include <stdlib.h>

#define PLACES 65536u /* each segment has one place; two that share it push each other out */
#define STRIPES 64u   /* place i is touched under stripe i % STRIPES */

struct place {
    int64_t segment; /* 0: free */
    double starts_d, ends_d;
};

struct segment_bounds {
    pthread_mutex_t stripes[STRIPES];
    struct place places[PLACES];
};

struct segment_bounds *segment_bounds_new(void)
{
    struct segment_bounds *bounds = calloc(1, sizeof *bounds);
    for (size_t i = 0; bounds != NULL && i < STRIPES; i++)
        (void)pthread_mutex_init(&bounds->stripes[i], NULL);
    return bounds;
}

void segment_bounds_free(struct segment_bounds *bounds)
{
    if (bounds == NULL)
        return;
    for (size_t i = 0; i < STRIPES; i++)
        (void)pthread_mutex_destroy(&bounds->stripes[i]);
    free(bounds);
}

bool segment_bounds_find(struct segment_bounds *bounds, int64_t segment, double *starts_d,
                         double *ends_d)
{
    size_t at = (size_t)((uint64_t)segment % PLACES);
    (void)pthread_mutex_lock(&bounds->stripes[at % STRIPES]);
    const struct place place = bounds->places[at];
    (void)pthread_mutex_unlock(&bounds->stripes[at % STRIPES]);
    *starts_d = place.starts_d;
    *ends_d = place.ends_d;
    return place.segment == segment;
}

void segment_bounds_put(struct segment_bounds *bounds, int64_t segment, double starts_d,
                        double ends_d)
{
    size_t at = (size_t)((uint64_t)segment % PLACES);
    (void)pthread_mutex_lock(&bounds->stripes[at % STRIPES]);
    bounds->places[at] = (struct place){segment, starts_d, ends_d};
    (void)pthread_mutex_unlock(&bounds->stripes[at % STRIPES]);
}
