#include "ebbmark/series.h"

#include <math.h>
#include <stdlib.h>

#include "linker.h"
#include "single.h"

#define ALL_PAIRS_UP_TO 12 /* with more events, each is paired with the next similar ones only */
#define PAIRS_OF_AN_EVENT 5
#define PAIRED_MOST 100
#define CYCLES_MOST 20000 /* between the two events of a seed */
#define TRIALS_MOST 200000
#define MID_SCATTER 0.02 /* of the duration; common practice, no source */
#define LEAST 1e-9       /* of an error, depth or duration: less is none */
#define DEPTH_MOST 1e9
#define UNKNOWN_ERROR 0.3 /* relative, of a depth or duration whose error is not known */
#define PROBABILITY_LEAST 1e-6
#define PERIODS_BEYOND 10.0 /* periods are thought of up to so many lengths of the data */
#define EVIDENCE_SLACK 12.0 /* many weak aliases together may reach what a series needs */

const struct ephemeris_link_rules ephemeris_link_rules_usual = {.period_least_d = 0.2,
                                                                .chance_missed = 0.05,
                                                                .depth_spread = 0.1,
                                                                .duration_spread = 0.2,
                                                                .evidence_least = 3.0,
                                                                .share_least = 0.01,
                                                                .excluded_below = 0.1};

struct search {
    struct linker linker;
    struct trial *trial;
    size_t trials, room;
    double best;
    struct base_arena *arena;
};

static bool is_share(double value)
{
    return value > 0.0 && value < 1.0;
}

static bool check_rules(const struct ephemeris_link_rules *rules, struct base_error *error)
{
    bool good = isfinite(rules->period_least_d) && rules->period_least_d > 0.0 &&
                is_share(rules->chance_missed) && is_share(rules->share_least) &&
                is_share(rules->excluded_below) && isfinite(rules->depth_spread) &&
                rules->depth_spread > 0.0 && isfinite(rules->duration_spread) &&
                rules->duration_spread > 0.0 && isfinite(rules->evidence_least);
    return good || base_fail(error, BASE_INVALID,
                             "The rules for linking dips need periods and spreads above 0, and "
                             "chances and shares between 0 and 1.");
}

static bool is_within(double value, double least, double most)
{
    return value >= least && value <= most;
}

static bool is_usable(const struct ephemeris_event *event)
{
    return is_within(event->mid_d, -EPHEMERIS_TIME_MOST_D, EPHEMERIS_TIME_MOST_D) &&
           is_within(event->mid_error_d, LEAST, EPHEMERIS_TIME_MOST_D) &&
           is_within(event->depth, LEAST, DEPTH_MOST) &&
           is_within(event->duration_d, LEAST, EPHEMERIS_TIME_MOST_D);
}

static double relative_error(double error, double value)
{
    return isfinite(error) && error >= 0.0 ? error / value : UNKNOWN_ERROR;
}

static struct linkable item_of(const struct ephemeris_event *event, size_t at,
                               const struct ephemeris_link_rules *rules)
{
    return (struct linkable){
        .mid_d = event->mid_d,
        .error_d = event->mid_error_d,
        .sigma_d = hypot(event->mid_error_d, MID_SCATTER * event->duration_d),
        .ln_depth = log(event->depth),
        .depth_sigma = hypot(relative_error(event->depth_error, event->depth), rules->depth_spread),
        .ln_duration = log(event->duration_d),
        .duration_sigma = hypot(relative_error(event->duration_error_d, event->duration_d),
                                rules->duration_spread),
        .ln_probability = log(fmax(event->probability, PROBABILITY_LEAST)),
        .event = at};
}

static int by_time(const void *left, const void *right)
{
    const struct linkable *a = left, *b = right;
    if (a->mid_d != b->mid_d)
        return a->mid_d < b->mid_d ? -1 : 1;
    return (a->event > b->event) - (a->event < b->event);
}

static bool open_linker(struct linker *linker, const struct ephemeris_event *event, size_t count,
                        struct base_arena *arena, struct base_error *error)
{
    size_t room = count + 1;
    linker->item = base_arena_take_array(arena, room, sizeof *linker->item);
    linker->member = base_arena_take_array(arena, room, sizeof *linker->member);
    linker->cycle = base_arena_take_array(arena, room, sizeof *linker->cycle);
    linker->cycle_of = base_arena_take_array(arena, room, sizeof *linker->cycle_of);
    linker->mid_d = base_arena_take_array(arena, room, sizeof *linker->mid_d);
    linker->error_d = base_arena_take_array(arena, room, sizeof *linker->error_d);
    linker->sigma_d = base_arena_take_array(arena, room, sizeof *linker->sigma_d);
    linker->in = base_arena_take_array(arena, room, sizeof *linker->in);
    linker->friend = base_arena_take_array(arena, room, sizeof *linker->friend);
    if (linker->item == NULL || linker->member == NULL || linker->cycle == NULL ||
        linker->cycle_of == NULL || linker->mid_d == NULL || linker->error_d == NULL ||
        linker->sigma_d == NULL || linker->in == NULL || linker->friend == NULL)
        return base_fail(error, BASE_MEMORY, "No memory to link %zu dips.", count);
    for (size_t i = 0; i < count; i++) {
        if (!(event[i].probability >= 0.0 && event[i].probability <= 1.0))
            return base_fail(error, BASE_INVALID, "The probability of dip %zu is not in 0 to 1.",
                             i);
        if (is_usable(&event[i]))
            linker->item[linker->count++] = item_of(&event[i], i, linker->rules);
    }
    qsort(linker->item, linker->count, sizeof *linker->item, by_time);
    if (linker->count > 0) {
        double first = linker->item[0].mid_d, last = linker->item[linker->count - 1].mid_d;
        double span = fmax(last, linker->watch.last_d) - fmin(first, linker->watch.first_d);
        if (linker->watch.stretches == 0)
            span = last - first;
        linker->observed_d = linker->watch.length_d > 0.0 ? linker->watch.length_d : span;
        linker->ln_periods = fmax(log(PERIODS_BEYOND * span / linker->rules->period_least_d), 1.0);
    }
    return true;
}

/* ---- trials ---- */

static int compare_seeds(const struct seed *a, const struct seed *b)
{
    if (a->first != b->first)
        return a->first < b->first ? -1 : 1;
    if (a->second != b->second)
        return a->second < b->second ? -1 : 1;
    return (a->cycles > b->cycles) - (a->cycles < b->cycles);
}

static int better_first(const struct trial *a, const struct trial *b)
{
    if (a->evidence != b->evidence)
        return a->evidence > b->evidence ? -1 : 1;
    return compare_seeds(&a->seed, &b->seed);
}

static int by_way(const void *left, const void *right)
{
    const struct trial *a = left, *b = right;
    if (a->way != b->way)
        return a->way < b->way ? -1 : 1;
    return better_first(a, b);
}

static int by_set(const void *left, const void *right)
{
    const struct trial *a = left, *b = right;
    if (a->set != b->set)
        return a->set < b->set ? -1 : 1;
    return better_first(a, b);
}

static int by_evidence(const void *left, const void *right)
{
    return better_first(left, right);
}

static void sort_trials(struct search *search, int (*compare)(const void *, const void *))
{
    if (search->trials > 1) /* the array may not be there yet */
        qsort(search->trial, search->trials, sizeof *search->trial, compare);
}

/* Below this a trial can neither be an alias that survives nor help to make a series. */
static double evidence_floor(const struct search *search)
{
    const struct ephemeris_link_rules *rules = search->linker.rules;
    return fmax(search->best + log(rules->share_least), rules->evidence_least - EVIDENCE_SLACK);
}

/* Keep each way once, and only what is above the floor. */
static void tidy_trials(struct search *search)
{
    sort_trials(search, by_way);
    double least = evidence_floor(search);
    size_t kept = 0;
    uint64_t last = 0;
    for (size_t i = 0; i < search->trials; i++) {
        bool again = i > 0 && search->trial[i].way == last;
        last = search->trial[i].way;
        if (!again && search->trial[i].evidence >= least)
            search->trial[kept++] = search->trial[i];
    }
    search->trials = kept;
}

static bool keep_trial(struct search *search, const struct trial *trial, struct base_error *error)
{
    if (search->trials == search->room && search->room > 0)
        tidy_trials(search);
    if (search->trials >= search->room / 2 && search->room < TRIALS_MOST) {
        size_t room = search->room == 0 ? 256 : 2 * search->room;
        struct trial *larger = realloc(search->trial, room * sizeof *larger);
        if (larger == NULL)
            return base_fail(error, BASE_MEMORY, "No memory for %zu ways to link dips.", room);
        search->trial = larger;
        search->room = room;
    }
    if (search->trials == search->room) {
        sort_trials(search, by_evidence);
        search->trials /= 2;
    }
    search->trial[search->trials++] = *trial;
    search->best = fmax(search->best, trial->evidence);
    return true;
}

/* The shortest period that two dips may have: twice their duration, or what the rules say. */
static double shortest_period(const struct linker *linker, size_t first, size_t second)
{
    const struct linkable *a = &linker->item[first], *b = &linker->item[second];
    return fmax(linker->rules->period_least_d, 2.0 * exp(0.5 * (a->ln_duration + b->ln_duration)));
}

static bool try_pair(struct search *search, size_t first, size_t second, struct base_error *error)
{
    struct linker *linker = &search->linker;
    double apart = linker->item[second].mid_d - linker->item[first].mid_d;
    double least = shortest_period(linker, first, second);
    linker_pair(linker, first, second);
    for (int64_t cycles = 1; cycles <= CYCLES_MOST && apart / (double)cycles >= least; cycles++) {
        struct seed seed = {.first = first, .second = second, .cycles = cycles};
        struct trial trial;
        linker_grow(linker, &seed);
        if (linker_weigh(linker, &seed, evidence_floor(search), &trial) &&
            !keep_trial(search, &trial, error))
            return false;
    }
    return true;
}

/* Pair one event with those after it that are open, similar and far enough. */
static bool try_pairs_of(struct search *search, size_t first, struct base_error *error)
{
    struct linker *linker = &search->linker;
    size_t most = linker->count <= ALL_PAIRS_UP_TO ? linker->count : PAIRS_OF_AN_EVENT;
    size_t pairs = 0;
    for (size_t i = first + 1; i < linker->count && pairs < most; i++) {
        if (linker->item[i].taken ||
            linker->item[i].mid_d - linker->item[first].mid_d < shortest_period(linker, first, i) ||
            !linker_is_similar(&linker->item[first], &linker->item[i]))
            continue;
        pairs++;
        if (!try_pair(search, first, i, error))
            return false;
    }
    return true;
}

/* Try all pairs that begin with one of at most PAIRED_MOST open events, spread over all. */
static bool try_pairs(struct search *search, struct base_error *error)
{
    struct linker *linker = &search->linker;
    size_t open = 0, seen = 0;
    search->trials = 0;
    search->best = -INFINITY;
    for (size_t i = 0; i < linker->count; i++)
        open += !linker->item[i].taken;
    size_t step = (open + PAIRED_MOST - 1) / PAIRED_MOST;
    for (size_t i = 0; i < linker->count; i++)
        if (!linker->item[i].taken && seen++ % step == 0 && !try_pairs_of(search, i, error))
            return false;
    tidy_trials(search);
    sort_trials(search, by_set);
    return true;
}

/* The set of events with the most evidence, all its periods together: trials from *from to *to. */
static double best_set(const struct search *search, size_t *from, size_t *to)
{
    double best = -INFINITY;
    *from = *to = 0;
    for (size_t i = 0, end; i < search->trials; i = end) {
        double sum = 1.0; /* in units of the first one's odds */
        for (end = i + 1; end < search->trials && search->trial[end].set == search->trial[i].set;
             end++)
            sum += exp(search->trial[end].evidence - search->trial[i].evidence);
        double evidence = search->trial[i].evidence + log(sum);
        if (evidence > best) {
            best = evidence;
            *from = i;
            *to = end;
        }
    }
    return best;
}

/* ---- what comes out ---- */

static bool fill_aliases(struct search *search, size_t from, size_t to,
                         struct ephemeris_series *series, struct base_error *error)
{
    double best = search->trial[from].evidence, sum = 0.0;
    while (series->surviving < to - from && search->trial[from + series->surviving].evidence >=
                                                best + log(search->linker.rules->share_least))
        sum += exp(search->trial[from + series->surviving++].evidence - best);
    series->aliases =
        series->surviving < EPHEMERIS_ALIASES_LISTED ? series->surviving : EPHEMERIS_ALIASES_LISTED;
    series->alias = base_arena_take_array(search->arena, series->aliases, sizeof *series->alias);
    if (series->alias == NULL)
        return base_fail(error, BASE_MEMORY, "No memory for %zu periods.", series->aliases);
    for (size_t i = 0; i < series->aliases; i++) {
        const struct trial *trial = &search->trial[from + i];
        series->alias[i] = (struct ephemeris_alias){.missing = trial->missing,
                                                    .evidence = trial->evidence,
                                                    .share = exp(trial->evidence - best) / sum};
        linker_pair(&search->linker, trial->seed.first, trial->seed.second);
        linker_grow(&search->linker, &trial->seed);
        linker_line(&search->linker, &series->alias[i].line);
    }
    return true;
}

static bool fill_series(struct search *search, size_t from, size_t to,
                        struct ephemeris_series *series, struct base_error *error)
{
    struct linker *linker = &search->linker;
    struct ephemeris_line line;
    if (!fill_aliases(search, from, to, series, error))
        return false;
    const struct seed *seed = &search->trial[from].seed;
    linker_pair(linker, seed->first, seed->second);
    linker_grow(linker, seed);
    linker_line(linker, &line);
    series->members = linker->members;
    series->member = base_arena_take_array(search->arena, linker->members, sizeof *series->member);
    series->cycle =
        base_arena_copy(search->arena, linker->cycle, linker->members * sizeof *series->cycle);
    if (series->member == NULL || series->cycle == NULL)
        return base_fail(error, BASE_MEMORY, "No memory for a series of %zu dips.",
                         linker->members);
    for (size_t i = 0; i < linker->members; i++) {
        struct linkable *item = &linker->item[linker->member[i]];
        series->member[i] = item->event;
        item->taken = true;
    }
    return true;
}

static bool fill_single(struct search *search, const struct linkable *item,
                        struct ephemeris_series *series, struct base_error *error)
{
    series->members = 1;
    series->member = base_arena_copy(search->arena, &item->event, sizeof item->event);
    if (series->member == NULL)
        return base_fail(error, BASE_MEMORY, "No memory for a single dip.");
    return single_ranges(&search->linker.watch, search->linker.rules, item->mid_d,
                         exp(item->ln_duration), search->arena, series, error);
}

static bool link_all(struct search *search, struct ephemeris_linked *out, struct base_error *error)
{
    struct linker *linker = &search->linker;
    out->series = base_arena_take_array(search->arena, linker->count + 1, sizeof *out->series);
    if (out->series == NULL)
        return base_fail(error, BASE_MEMORY, "No memory to link %zu dips.", linker->count);
    while (out->count < EPHEMERIS_SERIES_MOST) {
        size_t from, to;
        if (!try_pairs(search, error))
            return false;
        if (!(best_set(search, &from, &to) >= linker->rules->evidence_least))
            break;
        if (!fill_series(search, from, to, &out->series[out->count], error))
            return false;
        out->count++;
    }
    for (size_t i = 0; i < linker->count; i++)
        if (!linker->item[i].taken &&
            !fill_single(search, &linker->item[i], &out->series[out->count++], error))
            return false;
    return true;
}

bool ephemeris_series_link(const struct ephemeris_event *event, size_t count,
                           const struct ephemeris_watch *watch,
                           const struct ephemeris_link_rules *rules, struct base_arena *arena,
                           struct ephemeris_linked *out, struct base_error *error)
{
    struct search search = {.linker = {.rules = rules}, .arena = arena};
    *out = (struct ephemeris_linked){0};
    if (count > EPHEMERIS_EVENTS_MOST)
        return base_fail(error, BASE_TOO_LARGE,
                         "%zu dips of one star cannot be linked at once (limit %d); leave out the "
                         "least probable.",
                         count, EPHEMERIS_EVENTS_MOST);
    bool ok = check_rules(rules, error) && watch_open(&search.linker.watch, watch, error) &&
              open_linker(&search.linker, event, count, arena, error) &&
              link_all(&search, out, error);
    free(search.trial);
    watch_close(&search.linker.watch);
    if (!ok)
        *out = (struct ephemeris_linked){0};
    return ok;
}
