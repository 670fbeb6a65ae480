/* Other stars that dip at the same time: what many stars show at once is the instrument's doing. */
#include <math.h>
#include <stdlib.h>

#include "run.h"

#define LIKELY 0.5

/* When a likely candidate dips. */
struct dip {
    uint64_t reference;
    double mid_d;
};

static int compare_dips(const void *a, const void *b)
{
    const struct dip *left = a, *right = b;
    if (left->reference != right->reference)
        return left->reference < right->reference ? -1 : 1;
    return (left->mid_d > right->mid_d) - (left->mid_d < right->mid_d);
}

/* How many dips of the reference come before `time`, and at it where `at_too`. */
static size_t before(const struct dip *dips, size_t count, uint64_t reference, double time,
                     bool at_too)
{
    size_t low = 0, high = count;
    while (low < high) {
        size_t middle = low + (high - low) / 2;
        bool earlier = dips[middle].mid_d < time || (at_too && !(dips[middle].mid_d > time));
        if (dips[middle].reference < reference || (dips[middle].reference == reference && earlier))
            low = middle + 1;
        else
            high = middle;
    }
    return low;
}

static double half_duration_d(const struct store_candidate *candidate)
{
    double measured = candidate->duration_h / 48.0;
    return measured > 0.0 ? measured : 0.5 * (candidate->ends_d - candidate->starts_d);
}

/* The star's own likely candidates within reach of one of them. A star's stand together. */
static size_t count_own(const struct store_candidate *of_star, const uint64_t *references,
                        size_t count, size_t which, double reach)
{
    size_t own = 0;
    for (size_t i = 0; i < count; i++)
        own += of_star[i].probability >= LIKELY && references[i] == references[which] &&
                       of_star[i].mid_d >= of_star[which].mid_d - reach &&
                       of_star[i].mid_d <= of_star[which].mid_d + reach
                   ? 1
                   : 0;
    return own;
}

static void count_on_star(struct store_candidate *of_star, const uint64_t *references, size_t count,
                          const struct dip *dips, size_t dip_count)
{
    for (size_t i = 0; i < count; i++) {
        double reach = half_duration_d(&of_star[i]);
        size_t from = before(dips, dip_count, references[i], of_star[i].mid_d - reach, false);
        size_t to = before(dips, dip_count, references[i], of_star[i].mid_d + reach, true);
        size_t own = to > from ? count_own(of_star, references, count, i, reach) : 0;
        of_star[i].other_stars = (int64_t)(to - from - own);
    }
}

bool run_count_other_stars(struct run_result *result, struct base_error *error)
{
    struct store_candidate *candidates = result->sum.candidates.items;
    const uint64_t *references = result->sum.references.items;
    size_t count = result->sum.candidates.count, dip_count = 0;
    struct dip *dips = calloc(count > 0 ? count : 1, sizeof *dips);
    if (dips == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory to compare stars.");
    for (size_t i = 0; i < count; i++)
        if (candidates[i].probability >= LIKELY)
            dips[dip_count++] = (struct dip){references[i], candidates[i].mid_d};
    if (dip_count > 0)
        qsort(dips, dip_count, sizeof *dips, compare_dips);
    for (size_t from = 0, to = 0; from < count; from = to) {
        while (to < count && candidates[to].star == candidates[from].star)
            to++;
        count_on_star(candidates + from, references + from, to - from, dips, dip_count);
    }
    free(dips);
    return true;
}
