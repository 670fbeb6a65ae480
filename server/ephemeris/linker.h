/* Trying one way in which the events of a star may repeat. Private to the room; one thread. */
#ifndef EPHEMERIS_LINKER_H
#define EPHEMERIS_LINKER_H

#include "watch.h"

/* An event that can be linked. */
struct linkable {
    double mid_d, error_d;
    double sigma_d; /* the error with what mid-times of real dips scatter beyond it */
    double ln_depth, depth_sigma;
    double ln_duration, duration_sigma;
    double ln_probability;
    size_t event; /* its place in the caller's array */
    bool taken;   /* by a series found before */
};

struct linker {
    struct watch watch;
    const struct ephemeris_link_rules *rules;
    double ln_periods;     /* ln of the longest over the shortest period thought of */
    double observed_d;     /* how much time an event could have fallen into */
    struct linkable *item; /* by time */
    size_t count;
    /* The events of the way at hand, by time: place in item, cycle, mid and both errors. */
    size_t *member;
    int64_t *cycle;
    double *mid_d, *error_d, *sigma_d;
    size_t members;
    int64_t *cycle_of; /* of each item, where it is in */
    bool *in;
    /* What may join the pair at hand, by time: the pair itself, and what is similar to both. */
    size_t *friend;
    size_t friends;
};

/* Two events and the number of cycles between them. */
struct seed {
    size_t first, second;
    int64_t cycles;
};

struct trial {
    struct seed seed;
    uint64_t set, way; /* hashes of which events, and of which events at which cycles */
    double evidence;
    size_t missing;
};

/* Whether depth and duration of two events are similar. */
bool linker_is_similar(const struct linkable *a, const struct linkable *b);

/* Set the pair at hand: what is not taken and similar to both. */
void linker_pair(struct linker *linker, size_t first, size_t second);

/* Find the events that the seed's period explains: from the seed outwards, each judged by the line
 * through those before it. The seed's pair must be at hand. */
void linker_grow(struct linker *linker, const struct seed *seed);

/* The line through the grown members, cycles moved to its epoch. */
void linker_line(struct linker *linker, struct ephemeris_line *line);

/* Weigh the grown members against dips at random. False, and the trial not whole, as soon as the
 * evidence falls below `least`. */
bool linker_weigh(struct linker *linker, const struct seed *seed, double least,
                  struct trial *trial);

#endif
