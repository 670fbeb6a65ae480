#include "linkage.h"

#include <math.h>
#include <stdlib.h>

/* Clusters at work. Average linkage never brings a cluster nearer to others than the nearer of its
 * parts was, so two clusters that are each other's nearest can be merged at once, whatever else is
 * nearer elsewhere: following nearest neighbours as a chain costs n^2 where looking for the nearest
 * of all pairs each time would cost n^3. */
struct linkage {
    double *distance;
    size_t *size, *cluster;
    size_t n;
    size_t *open; /* clusters that may still merge, ascending */
    size_t open_count;
    size_t *chain; /* each the nearest of the one before */
    size_t chain_count;
};

static void close_cluster(struct linkage *linkage, size_t which)
{
    size_t at = 0;
    while (linkage->open[at] != which)
        at++;
    for (; at + 1 < linkage->open_count; at++)
        linkage->open[at] = linkage->open[at + 1];
    linkage->open_count--;
}

/* The open cluster nearest to `from`, and its distance: on a tie `favoured`, else the lowest index;
 * `favoured` may be `from` itself, which means none. */
static size_t nearest_of(const struct linkage *linkage, size_t from, size_t favoured, double *least)
{
    const double *row = linkage->distance + from * linkage->n;
    size_t nearest = favoured;
    *least = favoured != from ? row[favoured] : INFINITY;
    for (size_t i = 0; i < linkage->open_count; i++) {
        size_t other = linkage->open[i];
        if (other != from && row[other] < *least) {
            *least = row[other];
            nearest = other;
        }
    }
    return nearest;
}

/* Put two clusters together under the lower index. */
static void merge(struct linkage *linkage, size_t a, size_t b)
{
    size_t into = a < b ? a : b, from = a < b ? b : a, n = linkage->n;
    double *row = linkage->distance + into * n;
    const double *gone = linkage->distance + from * n;
    double here = (double)linkage->size[into], there = (double)linkage->size[from];
    close_cluster(linkage, from);
    for (size_t i = 0; i < linkage->open_count; i++) {
        size_t other = linkage->open[i];
        if (other == into)
            continue;
        row[other] = (here * row[other] + there * gone[other]) / (here + there);
        linkage->distance[other * n + into] = row[other];
    }
    linkage->size[into] += linkage->size[from];
    linkage->cluster[from] = into;
}

static void follow(struct linkage *linkage, double cut)
{
    while (linkage->open_count > 0) {
        if (linkage->chain_count == 0)
            linkage->chain[linkage->chain_count++] = linkage->open[0];
        size_t tip = linkage->chain[linkage->chain_count - 1];
        size_t before = linkage->chain_count > 1 ? linkage->chain[linkage->chain_count - 2] : tip;
        double least;
        size_t nearest = nearest_of(linkage, tip, before, &least);
        if (least > cut) {
            close_cluster(linkage, tip);
            linkage->chain_count--;
        } else if (nearest == before) {
            linkage->chain_count -= 2;
            merge(linkage, tip, before);
        } else {
            linkage->chain[linkage->chain_count++] = nearest;
        }
    }
}

bool linkage_average(double *distance, size_t *size, size_t n, double cut, size_t *cluster)
{
    size_t *lists = malloc((2 * n + 1) * sizeof *lists);
    if (lists == NULL)
        return false;
    struct linkage linkage = {.distance = distance,
                              .size = size,
                              .cluster = cluster,
                              .n = n,
                              .open = lists,
                              .open_count = n,
                              .chain = lists + n};
    for (size_t i = 0; i < n; i++)
        cluster[i] = linkage.open[i] = i;
    follow(&linkage, cut);
    /* A cluster always points to a lower index, so one pass upwards finds every root. */
    for (size_t i = 0; i < n; i++)
        cluster[i] = cluster[cluster[i]];
    free(lists);
    return true;
}
