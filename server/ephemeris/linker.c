/*
 * The evidence is the natural log of a ratio of two likelihoods, each averaged over what is not
 * known. That the members repeat: mid-times scatter about the line by their errors; a predicted dip
 * on data was missed with the chance of the rules; the period is uniform in its log, the epoch
 * uniform within a period; depths and durations scatter about a common value. That they do not:
 * each falls anywhere in the observed time, with any depth of three decades and any duration of a
 * factor of thirty. Averages over period, epoch and common values are taken about the best ones.
 */
#include "linker.h"

#include <assert.h>
#include <math.h>

#define GATE_SIGMA 4.0
#define SIMILAR_SIGMA 3.0
#define SURE_OF_CYCLE                                                                              \
    (1.0 / 6.0)               /* of a period: the error of a prediction that may still count       \
                               */
#define LN_DEPTHS 6.907755    /* ln 1000 */
#define LN_DURATIONS 3.401197 /* ln 30 */
#define LN_SQRT_2PI 0.918938533204672742
#define HASH_START UINT64_C(14695981039346656037) /* FNV-1a */
#define HASH_PRIME UINT64_C(1099511628211)

/* Sums of the line through the members so far, about the seed's own line. */
struct line_sums {
    double start_d, period_d; /* of the seed */
    double weight, cycles, squares, offsets, products;
};

static void add_to_sums(struct line_sums *sums, const struct linkable *item, int64_t cycle)
{
    double weight = 1.0 / (item->sigma_d * item->sigma_d), x = (double)cycle;
    double offset = item->mid_d - sums->start_d - x * sums->period_d;
    sums->weight += weight;
    sums->cycles += weight * x;
    sums->squares += weight * x * x;
    sums->offsets += weight * offset;
    sums->products += weight * x * offset;
}

/* The cycle of an item, if it lies on the line so far within the errors. */
static bool find_cycle(const struct line_sums *sums, const struct linkable *item, int64_t *cycle)
{
    double middle = sums->cycles / sums->weight;
    double spread = sums->squares - sums->cycles * middle;
    double slope = (sums->products - sums->offsets * middle) / spread;
    double level = sums->offsets / sums->weight - slope * middle, period = sums->period_d + slope;
    double since = item->mid_d - sums->start_d;
    double at = nearbyint((since - level) / period);
    double variance = 1.0 / sums->weight + (at - middle) * (at - middle) / spread;
    double off = since - level - at * period;
    *cycle = (int64_t)at;
    return sqrt(variance) <= SURE_OF_CYCLE * period &&
           off * off <= GATE_SIGMA * GATE_SIGMA * (variance + item->sigma_d * item->sigma_d);
}

static bool is_near(double a, double a_sigma, double b, double b_sigma)
{
    return fabs(a - b) <= SIMILAR_SIGMA * hypot(a_sigma, b_sigma);
}

bool linker_is_similar(const struct linkable *a, const struct linkable *b)
{
    return is_near(a->ln_depth, a->depth_sigma, b->ln_depth, b->depth_sigma) &&
           is_near(a->ln_duration, a->duration_sigma, b->ln_duration, b->duration_sigma);
}

void linker_pair(struct linker *linker, size_t first, size_t second)
{
    linker->friends = 0;
    for (size_t i = 0; i < linker->count; i++)
        if (i == first || i == second ||
            (!linker->item[i].taken && linker_is_similar(&linker->item[i], &linker->item[first]) &&
             linker_is_similar(&linker->item[i], &linker->item[second])))
            linker->friend[linker->friends++] = i;
}

/* Take the item in when it is on the line, at a cycle strictly between the two given ones. */
static bool try_item(struct linker *linker, struct line_sums *sums, size_t at, int64_t after,
                     int64_t before)
{
    int64_t cycle;
    if (!find_cycle(sums, &linker->item[at], &cycle) || cycle <= after || cycle >= before)
        return false;
    linker->in[at] = true;
    linker->cycle_of[at] = cycle;
    add_to_sums(sums, &linker->item[at], cycle);
    return true;
}

/* From the friends before place `left` and those from place `right` on, the nearer one first. */
static void grow_outwards(struct linker *linker, struct line_sums *sums, size_t left, size_t right)
{
    size_t low = linker->friend[left], high = linker->friend[right - 1]; /* outermost members */
    while (left > 0 || right < linker->friends) {
        bool to_left = right == linker->friends;
        if (left > 0 && !to_left)
            to_left = linker->item[low].mid_d - linker->item[linker->friend[left - 1]].mid_d <=
                      linker->item[linker->friend[right]].mid_d - linker->item[high].mid_d;
        if (to_left) {
            size_t next = linker->friend[--left];
            if (try_item(linker, sums, next, INT64_MIN, linker->cycle_of[low]))
                low = next;
        } else {
            size_t next = linker->friend[right++];
            if (try_item(linker, sums, next, linker->cycle_of[high], INT64_MAX))
                high = next;
        }
    }
}

static void collect_members(struct linker *linker)
{
    linker->members = 0;
    for (size_t i = 0; i < linker->friends; i++) {
        const struct linkable *item = &linker->item[linker->friend[i]];
        if (!linker->in[linker->friend[i]])
            continue;
        size_t at = linker->members++;
        linker->member[at] = linker->friend[i];
        linker->cycle[at] = linker->cycle_of[linker->friend[i]];
        linker->mid_d[at] = item->mid_d;
        linker->error_d[at] = item->error_d;
        linker->sigma_d[at] = item->sigma_d;
    }
}

void linker_grow(struct linker *linker, const struct seed *seed)
{
    const struct linkable *first = &linker->item[seed->first];
    const struct linkable *second = &linker->item[seed->second];
    struct line_sums sums = {.start_d = first->mid_d,
                             .period_d = (second->mid_d - first->mid_d) / (double)seed->cycles};
    for (size_t i = 0; i < linker->friends; i++)
        linker->in[linker->friend[i]] = false;
    linker->in[seed->first] = linker->in[seed->second] = true;
    linker->cycle_of[seed->first] = 0;
    linker->cycle_of[seed->second] = seed->cycles;
    add_to_sums(&sums, first, 0);
    add_to_sums(&sums, second, seed->cycles);
    size_t left = 0;
    while (linker->friend[left] != seed->first)
        left++;
    size_t right = left + 1;
    for (int64_t last = 0; linker->friend[right] != seed->second; right++)
        if (try_item(linker, &sums, linker->friend[right], last, seed -> cycles))
            last = linker->cycle_of[linker->friend[right]];
    grow_outwards(linker, &sums, left, right + 1);
    collect_members(linker);
}

void linker_line(struct linker *linker, struct ephemeris_line *line)
{
    int64_t origin;
    ephemeris_line_fit(linker->mid_d, linker->error_d, linker->cycle, linker->members, line,
                       &origin);
    for (size_t i = 0; i < linker->members; i++)
        linker->cycle[i] -= origin;
}

/* ln of the likelihood of values about a common one that is not known, over that of values anywhere
 * in the range. */
static double agreement(const struct linker *linker, bool depth, double ln_range)
{
    double weight = 0.0, sum = 0.0, squares = 0.0, ln_sigmas = 0.0;
    assert(linker->members >= 2);
    for (size_t i = 0; i < linker->members; i++) {
        const struct linkable *item = &linker->item[linker->member[i]];
        double sigma = depth ? item->depth_sigma : item->duration_sigma;
        double value = depth ? item->ln_depth : item->ln_duration;
        weight += 1.0 / (sigma * sigma);
        sum += value / (sigma * sigma);
        squares += value * value / (sigma * sigma);
        ln_sigmas += log(sigma);
    }
    double others = (double)linker->members - 1.0;
    return others * (ln_range - LN_SQRT_2PI) - ln_sigmas - 0.5 * log(weight) -
           0.5 * fmax(squares - sum * sum / weight, 0.0);
}

/* The same for mid-times, and for being seen at all. */
static double timing(const struct linker *linker, const struct ephemeris_line *line)
{
    double n = (double)linker->members;
    double determinant =
        line->epoch_error_d * line->epoch_error_d * line->period_error_d * line->period_error_d -
        line->covariance_d2 * line->covariance_d2;
    double sum = n * (log(linker->observed_d) - LN_SQRT_2PI + log1p(-linker->rules->chance_missed));
    for (size_t i = 0; i < linker->members; i++)
        sum += linker->item[linker->member[i]].ln_probability - log(linker->sigma_d[i]);
    return sum - 0.5 * line->chi2 + 2.0 * LN_SQRT_2PI + 0.5 * log(determinant) -
           2.0 * log(line->period_d) - log(linker->ln_periods);
}

struct miss_count {
    const struct linker *linker;
    const struct ephemeris_line *line;
    int64_t origin;
    size_t next; /* member whose cycle is not passed yet */
    double duration_d, least, evidence, missing;
};

static bool count_miss(void *context, int64_t cycle)
{
    struct miss_count *count = context;
    const struct linker *linker = count->linker;
    int64_t given = cycle + count->origin;
    while (count->next < linker->members && linker->cycle[count->next] < given)
        count->next++;
    if (count->next < linker->members && linker->cycle[count->next] == given)
        return true;
    double covered =
        watch_chance_covered(&linker->watch, ephemeris_line_mid_d(count->line, cycle),
                             ephemeris_line_mid_error_d(count->line, cycle), count->duration_d);
    count->evidence += log1p(-covered * (1.0 - linker->rules->chance_missed));
    count->missing += covered;
    return count->evidence >= count->least;
}

static uint64_t hash_in(uint64_t hash, uint64_t value)
{
    for (int byte = 0; byte < 8; byte++)
        hash = (hash ^ ((value >> (8 * byte)) & 0xff)) * HASH_PRIME;
    return hash;
}

bool linker_weigh(struct linker *linker, const struct seed *seed, double least, struct trial *trial)
{
    struct ephemeris_line line;
    int64_t origin;
    ephemeris_line_fit(linker->mid_d, linker->sigma_d, linker->cycle, linker->members, &line,
                       &origin);
    double ln_duration = 0.0;
    *trial = (struct trial){.seed = *seed, .set = HASH_START, .way = HASH_START};
    for (size_t i = 0; i < linker->members; i++) {
        ln_duration += linker->item[linker->member[i]].ln_duration / (double)linker->members;
        trial->set = hash_in(trial->set, linker->member[i]);
        trial->way = hash_in(trial->way, linker->member[i]);
        trial->way = hash_in(trial->way, (uint64_t)(linker->cycle[i] - linker->cycle[0]));
    }
    struct miss_count count = {.linker = linker,
                               .line = &line,
                               .origin = origin,
                               .duration_d = exp(ln_duration),
                               .least = least,
                               .evidence = timing(linker, &line) +
                                           agreement(linker, true, LN_DEPTHS) +
                                           agreement(linker, false, LN_DURATIONS)};
    if (count.evidence >= least)
        watch_each_cycle(&linker->watch, &line, count.duration_d, count_miss, &count);
    trial->evidence = count.evidence;
    trial->missing = (size_t)nearbyint(count.missing);
    return count.evidence >= least;
}
