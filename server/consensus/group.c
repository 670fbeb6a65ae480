#include "ebbmark/consensus_group.h"

#include <assert.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

double consensus_weighted_median(double *values, double *weights, size_t n)
{
    assert(n >= 1);
    /* An insertion sort of the two arrays together: groups hold tens of marks. */
    for (size_t i = 1; i < n; i++) {
        double value = values[i], weight = weights[i];
        size_t at = i;
        for (; at > 0 && values[at - 1] > value; at--) {
            values[at] = values[at - 1];
            weights[at] = weights[at - 1];
        }
        values[at] = value;
        weights[at] = weight;
    }
    double total = 0.0, reached = 0.0;
    for (size_t i = 0; i < n; i++)
        total += weights[i];
    for (size_t i = 0; i + 1 < n; i++) {
        reached += weights[i];
        if (2.0 * reached >= total)
            return values[i];
    }
    return values[n - 1];
}

/* One run of overlapping marks at work: clusters by index, their average distances in a matrix. */
struct run {
    const struct consensus_mark *const *marks;
    size_t n;
    double *distance; /* n x n; INFINITY forbids */
    size_t *size;     /* of a cluster; 0 once merged into another */
    size_t *nearest;  /* another cluster that none is nearer than, n when none may join */
    size_t *cluster;  /* of each mark */
};

static double distance_of(const struct consensus_mark *a, const struct consensus_mark *b)
{
    if (a->review == b->review)
        return INFINITY;
    double shared = fmin(a->ends_d, b->ends_d) - fmax(a->starts_d, b->starts_d);
    if (shared <= 0.0)
        return 1.0;
    double whole = fmax(a->ends_d, b->ends_d) - fmin(a->starts_d, b->starts_d);
    return 1.0 - shared / whole;
}

static void nearest_find(struct run *run, size_t i)
{
    double least = INFINITY;
    run->nearest[i] = run->n;
    for (size_t k = 0; k < run->n; k++)
        if (k != i && run->size[k] > 0 && run->distance[i * run->n + k] < least) {
            least = run->distance[i * run->n + k];
            run->nearest[i] = k;
        }
}

/* Put cluster b into a: the average distance to each other cluster is weighted by sizes. */
static void merge(struct run *run, size_t a, size_t b)
{
    size_t n = run->n;
    double wa = (double)run->size[a], wb = (double)run->size[b];
    for (size_t k = 0; k < n; k++) {
        if (run->size[k] == 0 || k == a || k == b)
            continue;
        double both = (wa * run->distance[a * n + k] + wb * run->distance[b * n + k]) / (wa + wb);
        run->distance[a * n + k] = run->distance[k * n + a] = both;
    }
    run->size[a] += run->size[b];
    run->size[b] = 0;
    for (size_t i = 0; i < n; i++)
        if (run->cluster[i] == b)
            run->cluster[i] = a;
    nearest_find(run, a);
    for (size_t k = 0; k < n; k++)
        if (run->size[k] > 0 && (run->nearest[k] == a || run->nearest[k] == b))
            nearest_find(run, k);
}

/* The two nearest clusters, or false when none are near enough. */
static bool nearest_pair(const struct run *run, size_t *a, size_t *b)
{
    double least = CONSENSUS_GROUP_CUT;
    bool found = false;
    for (size_t i = 0; i < run->n; i++) {
        if (run->size[i] == 0 || run->nearest[i] == run->n)
            continue;
        double distance = run->distance[i * run->n + run->nearest[i]];
        if (distance < least || (!found && distance <= least)) {
            least = distance;
            *a = i < run->nearest[i] ? i : run->nearest[i];
            *b = i < run->nearest[i] ? run->nearest[i] : i;
            found = true;
        }
    }
    return found;
}

static void agglomerate(struct run *run)
{
    size_t n = run->n, a = 0, b = 0;
    for (size_t i = 0; i < n; i++) {
        run->size[i] = 1;
        run->cluster[i] = i;
        for (size_t k = 0; k < i; k++)
            run->distance[i * n + k] = run->distance[k * n + i] =
                distance_of(run->marks[i], run->marks[k]);
    }
    for (size_t i = 0; i < n; i++)
        nearest_find(run, i);
    while (nearest_pair(run, &a, &b))
        merge(run, a, b);
}

static bool run_group(const struct consensus_mark *const *marks, size_t n, size_t *cluster,
                      struct base_error *error)
{
    struct run run = {.marks = marks, .n = n, .cluster = cluster};
    run.distance = malloc(n * n * sizeof *run.distance);
    run.size = malloc(n * sizeof *run.size);
    run.nearest = malloc(n * sizeof *run.nearest);
    bool ok = run.distance != NULL && run.size != NULL && run.nearest != NULL;
    if (ok)
        agglomerate(&run);
    free(run.nearest);
    free(run.size);
    free(run.distance);
    return ok || base_fail(error, BASE_MEMORY, "There is no memory to group marks.");
}

/* ---- the whole ---- */

struct key {
    const struct consensus_mark *mark;
    size_t index; /* in the caller's array */
};

static int by_start(const void *a, const void *b)
{
    const struct consensus_mark *one = ((const struct key *)a)->mark;
    const struct consensus_mark *other = ((const struct key *)b)->mark;
    if (one->starts_d != other->starts_d)
        return one->starts_d < other->starts_d ? -1 : 1;
    if (one->ends_d != other->ends_d)
        return one->ends_d < other->ends_d ? -1 : 1;
    return (one->id > other->id) - (one->id < other->id);
}

static int by_centre(const void *a, const void *b)
{
    const struct consensus_mark *one = ((const struct key *)a)->mark;
    const struct consensus_mark *other = ((const struct key *)b)->mark;
    double left = one->starts_d + one->ends_d, right = other->starts_d + other->ends_d;
    if (left != right)
        return left < right ? -1 : 1;
    return (one->id > other->id) - (one->id < other->id);
}

/* The arrays of one call. */
struct whole {
    struct key *keys;                    /* n; sorted by start, and within a long run by centre */
    const struct consensus_mark **marks; /* n: the marks of the piece at work */
    size_t *cluster;                     /* n: of the piece at work */
    size_t *label;                       /* by caller's index: a number for each group, from 0 */
    size_t groups;
};

/* Group keys[first … first+count-1], at most CONSENSUS_GROUP_RUN_MAX of them. */
static bool piece_group(struct whole *whole, size_t first, size_t count, struct base_error *error)
{
    for (size_t i = 0; i < count; i++)
        whole->marks[i] = whole->keys[first + i].mark;
    if (!run_group(whole->marks, count, whole->cluster, error))
        return false;
    for (size_t i = 0; i < count; i++) {
        size_t root = whole->cluster[i];
        if (root == i)
            whole->label[whole->keys[first + i].index] = whole->groups++;
    }
    for (size_t i = 0; i < count; i++)
        whole->label[whole->keys[first + i].index] =
            whole->label[whole->keys[first + whole->cluster[i]].index];
    return true;
}

/* A run too long for one piece is cut where centres stand farthest apart, within its middle half.
 */
static bool pieces_group(struct whole *whole, size_t first, size_t count, struct base_error *error)
{
    if (count <= CONSENSUS_GROUP_RUN_MAX)
        return piece_group(whole, first, count, error);
    size_t cut = count / 2;
    double widest = -1.0;
    for (size_t i = count / 4; i < count - count / 4; i++) {
        const struct consensus_mark *left = whole->keys[first + i - 1].mark;
        const struct consensus_mark *right = whole->keys[first + i].mark;
        double step = right->starts_d + right->ends_d - left->starts_d - left->ends_d;
        if (step > widest) {
            widest = step;
            cut = i;
        }
    }
    return pieces_group(whole, first, cut, error) &&
           pieces_group(whole, first + cut, count - cut, error);
}

static bool runs_group(struct whole *whole, size_t n, struct base_error *error)
{
    bool ok = true;
    for (size_t first = 0; ok && first < n;) {
        double reached = whole->keys[first].mark->ends_d;
        size_t next = first + 1;
        while (next < n && whole->keys[next].mark->starts_d < reached) {
            reached = fmax(reached, whole->keys[next].mark->ends_d);
            next++;
        }
        if (next - first > CONSENSUS_GROUP_RUN_MAX)
            qsort(whole->keys + first, next - first, sizeof *whole->keys, by_centre);
        ok = pieces_group(whole, first, next - first, error);
        first = next;
    }
    return ok;
}

/* Number the groups by the start of their first mark, and hand both arrays out sorted by start. */
static bool hand_out(struct whole *whole, size_t n, size_t *sorted, size_t *group)
{
    size_t *number = malloc((whole->groups + 1) * sizeof *number), next = 0;
    if (number == NULL)
        return false;
    for (size_t g = 0; g < whole->groups; g++)
        number[g] = SIZE_MAX;
    qsort(whole->keys, n, sizeof *whole->keys, by_start);
    for (size_t i = 0; i < n; i++) {
        size_t label = whole->label[whole->keys[i].index];
        if (number[label] == SIZE_MAX)
            number[label] = next++;
        sorted[i] = whole->keys[i].index;
        group[i] = number[label];
    }
    free(number);
    return true;
}

bool consensus_group_marks(const struct consensus_mark *marks, size_t n, size_t *sorted,
                           size_t *group, size_t *groups, struct base_error *error)
{
    struct whole whole = {0};
    whole.keys = malloc((n + 1) * sizeof *whole.keys);
    whole.marks = malloc((n + 1) * sizeof *whole.marks);
    whole.cluster = malloc((n + 1) * sizeof *whole.cluster);
    whole.label = malloc((n + 1) * sizeof *whole.label);
    bool ok = (whole.keys != NULL && whole.marks != NULL && whole.cluster != NULL &&
               whole.label != NULL) ||
              base_fail(error, BASE_MEMORY, "There is no memory to group marks.");
    for (size_t i = 0; ok && i < n; i++)
        whole.keys[i] = (struct key){&marks[i], i};
    if (ok) {
        qsort(whole.keys, n, sizeof *whole.keys, by_start);
        ok = runs_group(&whole, n, error) &&
             (hand_out(&whole, n, sorted, group) ||
              base_fail(error, BASE_MEMORY, "There is no memory to group marks."));
    }
    *groups = ok ? whole.groups : 0;
    free(whole.label);
    free(whole.cluster);
    free(whole.marks);
    free(whole.keys);
    return ok;
}
