#include "robust.h"

#include <assert.h>
#include <math.h>
#include <stdlib.h>

static int compare_doubles(const void *left, const void *right)
{
    double a = *(const double *)left, b = *(const double *)right;
    return (a > b) - (a < b);
}

static void swap(double *a, double *b)
{
    double kept = *a;
    *a = *b;
    *b = kept;
}

/* Order the ends and the middle of [low, high] and give the middle one as pivot. */
static double pivot_of(double *values, size_t low, size_t high)
{
    size_t middle = low + (high - low) / 2;
    if (values[middle] < values[low])
        swap(&values[middle], &values[low]);
    if (values[high] < values[low])
        swap(&values[high], &values[low]);
    if (values[high] < values[middle])
        swap(&values[high], &values[middle]);
    return values[middle];
}

/* Hoare's selection: afterwards values[rank] is the one of that rank, none before it is larger and
 * none after it smaller. Input made to defeat the pivots ends in a sort instead. */
static double select_rank(double *values, size_t n, size_t rank)
{
    size_t low = 0, high = n - 1;
    for (int round = 0; low < high; round++) {
        if (round == 64) {
            qsort(values + low, high - low + 1, sizeof *values, compare_doubles);
            break;
        }
        double pivot = pivot_of(values, low, high);
        size_t i = low, j = high;
        while (i <= j) {
            while (values[i] < pivot)
                i++;
            while (values[j] > pivot)
                j--;
            if (i <= j) {
                swap(&values[i], &values[j]);
                i++;
                if (j == 0)
                    break;
                j--;
            }
        }
        if (rank <= j)
            high = j;
        else if (rank >= i)
            low = i;
        else
            break;
    }
    return values[rank];
}

double lightcurve_median(double *values, size_t n)
{
    assert(n > 0);
    double upper = select_rank(values, n, n / 2);
    if (n % 2 == 1)
        return upper;
    double lower = values[0];
    for (size_t i = 1; i < n / 2; i++)
        lower = fmax(lower, values[i]);
    return 0.5 * lower + 0.5 * upper;
}

double lightcurve_mad(const double *values, size_t n, double centre, double *scratch)
{
    for (size_t i = 0; i < n; i++)
        scratch[i] = fabs(values[i] - centre);
    return lightcurve_median(scratch, n);
}

double lightcurve_biweight(double *values, size_t n, double *scratch)
{
    double centre = lightcurve_median(values, n);
    double reach = 6.0 * lightcurve_mad(values, n, centre, scratch);
    if (!(reach > 0.0))
        return centre;
    double sum = 0.0, weights = 0.0;
    for (size_t i = 0; i < n; i++) {
        double off = values[i] - centre, u = off / reach;
        if (fabs(u) < 1.0) {
            double left = 1.0 - u * u, weight = left * left;
            sum += weight * off;
            weights += weight;
        }
    }
    return centre + sum / weights;
}

size_t lightcurve_stretch_end(const double *time, size_t n, size_t first, double gap_d)
{
    size_t end = first + 1;
    while (end < n && time[end] - time[end - 1] <= gap_d)
        end++;
    return end;
}

size_t lightcurve_first_not_before(const double *time, size_t low, size_t high, double at)
{
    while (low < high) {
        size_t middle = low + (high - low) / 2;
        if (time[middle] < at)
            low = middle + 1;
        else
            high = middle;
    }
    return low;
}
