#include "group.h"

#include <assert.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "linkage.h"

/* ---- the weighted median ---- */

static void swap(double *values, size_t i, size_t k)
{
    double kept = values[i];
    values[i] = values[k];
    values[k] = kept;
}

/* Let the value at `at` sink to its place in the heap of the first n. */
static void sink(double *values, double *weights, size_t at, size_t n)
{
    for (;;) {
        size_t largest = at, left = 2 * at + 1, right = left + 1;
        if (left < n && values[left] > values[largest])
            largest = left;
        if (right < n && values[right] > values[largest])
            largest = right;
        if (largest == at)
            return;
        swap(values, at, largest);
        swap(weights, at, largest);
        at = largest;
    }
}

double consensus_weighted_median(double *values, double *weights, size_t n)
{
    assert(n >= 1);
    /* A heap sort keeps the two arrays together without memory of its own. */
    for (size_t i = n / 2; i-- > 0;)
        sink(values, weights, i, n);
    for (size_t end = n; end-- > 1;) {
        swap(values, 0, end);
        swap(weights, 0, end);
        sink(values, weights, 0, end);
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

/* ---- the arrays of one call ---- */

struct key {
    const struct consensus_mark *mark;
    size_t index; /* in the caller's array */
};

struct whole {
    struct key *keys; /* n; sorted by start, and within a long run by centre */
    size_t *cluster;  /* n: of the piece at work */
    size_t *label;    /* by caller's index: a number for each group, from 0, with holes */
    size_t labels;
    size_t evaluations; /* distances computed, for the tests of cost */
};

static double distance_of(double starts_a, double ends_a, double starts_b, double ends_b)
{
    double shared = fmin(ends_a, ends_b) - fmax(starts_a, starts_b);
    if (shared <= 0.0)
        return 1.0;
    return 1.0 - shared / (fmax(ends_a, ends_b) - fmin(starts_a, starts_b));
}

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

/* ---- a piece of at most CONSENSUS_GROUP_RUN_MAX overlapping marks ---- */

static void piece_distances(struct whole *whole, const struct key *keys, size_t n, double *distance)
{
    for (size_t i = 0; i < n; i++) {
        const struct consensus_mark *a = keys[i].mark;
        for (size_t k = 0; k < i; k++) {
            const struct consensus_mark *b = keys[k].mark;
            distance[i * n + k] = distance[k * n + i] =
                a->review == b->review
                    ? INFINITY
                    : distance_of(a->starts_d, a->ends_d, b->starts_d, b->ends_d);
        }
    }
    whole->evaluations += n * (n - 1) / 2;
}

static bool piece_group(struct whole *whole, size_t first, size_t count, struct base_error *error)
{
    const struct key *keys = whole->keys + first;
    double *distance = malloc(count * count * sizeof *distance);
    size_t *size = malloc(count * sizeof *size);
    bool ok = distance != NULL && size != NULL;
    if (ok) {
        piece_distances(whole, keys, count, distance);
        for (size_t i = 0; i < count; i++)
            size[i] = 1;
        ok = linkage_average(distance, size, count, CONSENSUS_GROUP_CUT, whole->cluster);
    }
    for (size_t i = 0; ok && i < count; i++)
        whole->label[keys[i].index] =
            whole->cluster[i] == i ? whole->labels++ : whole->label[keys[whole->cluster[i]].index];
    free(size);
    free(distance);
    return ok || base_fail(error, BASE_MEMORY, "There is no memory to group marks.");
}

/* ---- joining what a cut between two pieces has parted ---- */

/* A group of one side, seen as one interval. */
struct part {
    size_t label, size;
    double starts_d, ends_d; /* means of its marks */
    double from_cut;
    bool left;
};
struct seat { /* a mark's review and the part it sits in */
    int64_t review;
    size_t part;
};

static int by_distance_from_cut(const void *a, const void *b)
{
    const struct part *one = a, *other = b;
    if (one->from_cut != other->from_cut)
        return one->from_cut < other->from_cut ? -1 : 1;
    return (one->label > other->label) - (one->label < other->label);
}

static int by_review(const void *a, const void *b)
{
    const struct seat *one = a, *other = b;
    if (one->review != other->review)
        return one->review < other->review ? -1 : 1;
    return (one->part > other->part) - (one->part < other->part);
}

/* What joining works with: the parts of both sides, from label `base` on. */
struct join {
    struct part *parts; /* slots, later only those that are taken up */
    size_t count;
    size_t *place; /* by label - base: which part, SIZE_MAX when left out */
    struct seat *seats;
    size_t seat_count;
    double *distance;
    size_t *size, *cluster;
};

/* The parts nearest to the cut, at most CONSENSUS_GROUP_RUN_MAX. */
static void parts_gather(const struct whole *whole, struct join *join, size_t first, size_t cut,
                         size_t count, size_t base, size_t slots)
{
    const struct consensus_mark *edge = whole->keys[first + cut].mark;
    double middle = 0.5 * (edge->starts_d + edge->ends_d);
    for (size_t i = 0; i < count; i++) {
        const struct key *key = &whole->keys[first + i];
        struct part *part = &join->parts[whole->label[key->index] - base];
        part->size++;
        part->starts_d += key->mark->starts_d;
        part->ends_d += key->mark->ends_d;
        part->left = i < cut;
    }
    for (size_t s = 0; s < slots; s++) {
        struct part *part = &join->parts[s];
        part->label = base + s;
        part->from_cut = INFINITY;
        join->place[s] = SIZE_MAX;
        if (part->size == 0)
            continue;
        part->starts_d /= (double)part->size;
        part->ends_d /= (double)part->size;
        part->from_cut = fabs(0.5 * (part->starts_d + part->ends_d) - middle);
        join->count++;
    }
    qsort(join->parts, slots, sizeof *join->parts, by_distance_from_cut);
    if (join->count > CONSENSUS_GROUP_RUN_MAX)
        join->count = CONSENSUS_GROUP_RUN_MAX;
    for (size_t p = 0; p < join->count; p++)
        join->place[join->parts[p].label - base] = p;
}

/* Parts of one side stay apart, as average linkage had them, and so do parts that share a review.
 */
static void parts_distances(struct whole *whole, const struct join *join)
{
    size_t n = join->count;
    for (size_t i = 0; i < n; i++) {
        const struct part *a = &join->parts[i];
        join->size[i] = a->size;
        for (size_t k = 0; k < i; k++) {
            const struct part *b = &join->parts[k];
            join->distance[i * n + k] = join->distance[k * n + i] =
                a->left == b->left ? INFINITY
                                   : distance_of(a->starts_d, a->ends_d, b->starts_d, b->ends_d);
        }
    }
    whole->evaluations += n * (n - 1) / 2;
    for (size_t from = 0; from < join->seat_count;) {
        size_t to = from;
        while (to < join->seat_count && join->seats[to].review == join->seats[from].review)
            to++;
        for (size_t i = from; i < to; i++)
            for (size_t k = from; k < i; k++) {
                size_t a = join->seats[i].part, b = join->seats[k].part;
                join->distance[a * n + b] = join->distance[b * n + a] = INFINITY;
            }
        from = to;
    }
}

static bool join_open(struct join *join, size_t slots, size_t count)
{
    size_t most = slots < CONSENSUS_GROUP_RUN_MAX ? slots : CONSENSUS_GROUP_RUN_MAX;
    join->parts = calloc(slots, sizeof *join->parts);
    join->place = malloc(slots * sizeof *join->place);
    join->seats = malloc(count * sizeof *join->seats);
    join->distance = malloc(most * most * sizeof *join->distance);
    join->size = malloc(most * sizeof *join->size);
    join->cluster = malloc(most * sizeof *join->cluster);
    return join->parts != NULL && join->place != NULL && join->seats != NULL &&
           join->distance != NULL && join->size != NULL && join->cluster != NULL;
}

static void join_free(struct join *join)
{
    free(join->cluster);
    free(join->size);
    free(join->distance);
    free(join->seats);
    free(join->place);
    free(join->parts);
}

/* Join groups left and right of the cut at first + cut whose labels start at base. */
static bool pieces_join(struct whole *whole, size_t first, size_t cut, size_t count, size_t base,
                        struct base_error *error)
{
    struct join join = {0};
    bool ok = join_open(&join, whole->labels - base, count);
    if (ok) {
        parts_gather(whole, &join, first, cut, count, base, whole->labels - base);
        for (size_t i = 0; i < count; i++) {
            const struct key *key = &whole->keys[first + i];
            size_t part = join.place[whole->label[key->index] - base];
            if (part != SIZE_MAX)
                join.seats[join.seat_count++] = (struct seat){key->mark->review, part};
        }
        qsort(join.seats, join.seat_count, sizeof *join.seats, by_review);
        parts_distances(whole, &join);
        ok = linkage_average(join.distance, join.size, join.count, CONSENSUS_GROUP_CUT,
                             join.cluster);
    }
    for (size_t i = 0; ok && i < count; i++) {
        size_t *label = &whole->label[whole->keys[first + i].index];
        size_t part = join.place[*label - base];
        if (part != SIZE_MAX)
            *label = join.parts[join.cluster[part]].label;
    }
    join_free(&join);
    return ok || base_fail(error, BASE_MEMORY, "There is no memory to group marks.");
}

/* ---- the whole ---- */

/* A run too long for one piece is cut where centres stand farthest apart, within its middle half;
 * what the cut has parted is joined again. */
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
    size_t base = whole->labels;
    return pieces_group(whole, first, cut, error) &&
           pieces_group(whole, first + cut, count - cut, error) &&
           pieces_join(whole, first, cut, count, base, error);
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
static bool hand_out(struct whole *whole, size_t n, size_t *sorted, size_t *group, size_t *groups)
{
    size_t *number = malloc((whole->labels + 1) * sizeof *number), next = 0;
    if (number == NULL)
        return false;
    for (size_t g = 0; g < whole->labels; g++)
        number[g] = SIZE_MAX;
    qsort(whole->keys, n, sizeof *whole->keys, by_start);
    for (size_t i = 0; i < n; i++) {
        size_t label = whole->label[whole->keys[i].index];
        if (number[label] == SIZE_MAX)
            number[label] = next++;
        sorted[i] = whole->keys[i].index;
        group[i] = number[label];
    }
    *groups = next;
    free(number);
    return true;
}

bool group_marks_counted(const struct consensus_mark *marks, size_t n, size_t *sorted,
                         size_t *group, size_t *groups, size_t *evaluations,
                         struct base_error *error)
{
    struct whole whole = {0};
    whole.keys = malloc((n + 1) * sizeof *whole.keys);
    whole.cluster = malloc((n + 1) * sizeof *whole.cluster);
    whole.label = malloc((n + 1) * sizeof *whole.label);
    *groups = 0;
    bool ok = whole.keys != NULL && whole.cluster != NULL && whole.label != NULL;
    if (!ok)
        (void)base_fail(error, BASE_MEMORY, "There is no memory to group marks.");
    for (size_t i = 0; ok && i < n; i++)
        whole.keys[i] = (struct key){&marks[i], i};
    if (ok) {
        qsort(whole.keys, n, sizeof *whole.keys, by_start);
        ok = runs_group(&whole, n, error) &&
             (hand_out(&whole, n, sorted, group, groups) ||
              base_fail(error, BASE_MEMORY, "There is no memory to group marks."));
    }
    *evaluations = whole.evaluations;
    free(whole.label);
    free(whole.cluster);
    free(whole.keys);
    return ok;
}

bool consensus_group_marks(const struct consensus_mark *marks, size_t n, size_t *sorted,
                           size_t *group, size_t *groups, struct base_error *error)
{
    size_t evaluations;
    return group_marks_counted(marks, n, sorted, group, groups, &evaluations, error);
}
