/*
 * A simulated campaign for the tests, the evaluation and the bench of the consensus: segments with
 * dips and lures, reviewers with skills, marks with edges, and the program's own grouping of them.
 * Numbers are drawn by a generator of its own, so that every machine sees the same campaign.
 */
#ifndef TESTS_CONSENSUS_SIMULATION_H
#define TESTS_CONSENSUS_SIMULATION_H

#include <assert.h>
#include <math.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/consensus_group.h"
#include "ebbmark/consensus_model.h"

#define SIM_SEGMENT_D 27.0
#define SIM_THINGS_MAX 64  /* on one segment */
#define SIM_MARKS_MAX 4000 /* on one segment */

struct sim_settings {
    uint64_t seed;
    size_t segments, people;
    double looks; /* Poisson mean a segment, at least two each */
    double injected, inverted;
    double dips, lures;             /* a segment */
    double dip_effect_sd;           /* logit, per dip */
    double lure_effect_sd;          /* logit, per lure */
    double random, never, in_pairs; /* shares of the reviewers */
    double chance;                  /* median chance marks a segment */
    bool even;                      /* all are equally active */
    bool certainty;                 /* marks are sure or not; else all are sure */
};

/* As in the design's table. */
static inline struct sim_settings sim_standard(uint64_t seed, double looks)
{
    return (struct sim_settings){.seed = seed,
                                 .segments = 2000,
                                 .people = 250,
                                 .looks = looks,
                                 .injected = 0.10,
                                 .inverted = 0.05,
                                 .dips = 0.25,
                                 .lures = 0.35,
                                 .lure_effect_sd = 1.0,
                                 .random = 0.05,
                                 .never = 0.05,
                                 .chance = 0.06};
}

enum sim_class { SIM_NOTHING, SIM_DIP, SIM_LURE };

struct sim_person {
    double a, b, chance; /* logits at SNR 10; chance marks a segment */
    double activity;
    int partner; /* who marks the same places by agreement, or -1 */
};

/* What a group is in truth. */
struct sim_truth {
    enum sim_class class; /* of the most of its marks; SIM_DIP once a dip */
    bool survey;
    bool again; /* a dip that a better group stands for already */
};

struct simulation {
    struct consensus_input input;
    struct consensus_item *items;
    struct consensus_look *looks;
    struct sim_truth *truth; /* items */
    struct sim_person *people;
    double *days;
    size_t survey_dips; /* marked or not */
    size_t survey_lures;
    size_t reviews;
    size_t item_room, look_room;
};

/* ---- numbers ---- */

static inline uint64_t sim_bits(uint64_t *state)
{
    uint64_t z = (*state += 0x9e3779b97f4a7c15u);
    z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9u;
    z = (z ^ (z >> 27)) * 0x94d049bb133111ebu;
    return z ^ (z >> 31);
}

static inline double sim_uniform(uint64_t *state)
{
    return ((double)(sim_bits(state) >> 11) + 0.5) / 9007199254740992.0;
}

static inline double sim_normal(uint64_t *state)
{
    double radius = sqrt(-2.0 * log(sim_uniform(state)));
    return radius * cos(6.283185307179586 * sim_uniform(state));
}

static inline size_t sim_poisson(uint64_t *state, double mean)
{
    size_t n = 0;
    double left = exp(-mean);
    for (double product = sim_uniform(state); product > left; product *= sim_uniform(state))
        n++;
    return n;
}

static inline double sim_log_uniform(uint64_t *state, double low, double high)
{
    return low * pow(high / low, sim_uniform(state));
}

static inline double sim_log_normal(uint64_t *state, double median, double sd)
{
    return median * exp(sd * sim_normal(state));
}

static inline double sim_logistic(double logit)
{
    return 1.0 / (1.0 + exp(-logit));
}

/* ---- one segment ---- */

struct sim_thing {
    enum sim_class class;
    bool injected;
    double mid_d, length_d, snr, measured_snr, effect;
};

struct sim_segment {
    struct sim_thing things[SIM_THINGS_MAX];
    size_t thing_count;
    int32_t persons[1024]; /* who looks */
    size_t looks;
    struct consensus_mark marks[SIM_MARKS_MAX];
    int origin[SIM_MARKS_MAX]; /* the thing a mark is about, or -1 */
    size_t mark_count;
    bool injected, inverted;
};

static inline void sim_thing_add(struct sim_segment *segment, uint64_t *state,
                                 const struct sim_settings *settings, enum sim_class class,
                                 bool injected)
{
    if (segment->thing_count == SIM_THINGS_MAX)
        return;
    bool dip = class == SIM_DIP;
    struct sim_thing thing = {.class = class, .injected = injected};
    thing.mid_d = SIM_SEGMENT_D * sim_uniform(state);
    thing.snr = dip ? sim_log_uniform(state, 3.5, 40.0) : sim_log_uniform(state, 3.0, 20.0);
    thing.length_d = dip ? sim_log_normal(state, 0.17, 0.5) : sim_log_normal(state, 0.20, 0.6);
    thing.measured_snr = fmax(1.0, thing.snr + sim_normal(state));
    thing.effect = (dip ? settings->dip_effect_sd : settings->lure_effect_sd) * sim_normal(state);
    segment->things[segment->thing_count++] = thing;
}

static inline void sim_mark_add(struct sim_segment *segment, int32_t person, double mid_d,
                                double length_d, int origin, bool sure)
{
    if (segment->mark_count == SIM_MARKS_MAX)
        return;
    length_d = fmax(length_d, 0.02);
    segment->origin[segment->mark_count] = origin;
    segment->marks[segment->mark_count] =
        (struct consensus_mark){.id = (int64_t)segment->mark_count + 1,
                                .review = person,
                                .person = person,
                                .starts_d = mid_d - 0.5 * length_d,
                                .ends_d = mid_d + 0.5 * length_d,
                                .weight = 1.0,
                                .sure = sure};
    segment->mark_count++;
}

static inline bool sim_is_looking(const struct sim_segment *segment, int person)
{
    for (size_t k = 0; k < segment->looks; k++)
        if (segment->persons[k] == person)
            return true;
    return false;
}

/* Draw who looks, by activity and nobody twice; half the time a partner follows. */
static inline void sim_draw_people(struct sim_segment *segment, uint64_t *state,
                                   const struct sim_settings *settings,
                                   const struct sim_person *people, const double *reached)
{
    size_t wanted = sim_poisson(state, settings->looks);
    wanted = wanted < 2 ? 2 : wanted;
    wanted = wanted > settings->people / 2 ? settings->people / 2 : wanted;
    wanted = wanted > 1000 ? 1000 : wanted;
    while (segment->looks < wanted) {
        double at = reached[settings->people - 1] * sim_uniform(state);
        size_t low = 0, high = settings->people - 1;
        while (low < high) {
            size_t middle = (low + high) / 2;
            if (reached[middle] < at)
                low = middle + 1;
            else
                high = middle;
        }
        if (sim_is_looking(segment, (int)low))
            continue;
        segment->persons[segment->looks++] = (int32_t)low;
        int partner = people[low].partner;
        if (partner >= 0 && segment->looks < wanted && !sim_is_looking(segment, partner) &&
            sim_uniform(state) < 0.5)
            segment->persons[segment->looks++] = partner;
    }
}

static inline bool sim_sure(uint64_t *state, const struct sim_settings *settings,
                            enum sim_class class)
{
    if (!settings->certainty)
        return true;
    return sim_uniform(state) < (class == SIM_DIP ? 0.75 : class == SIM_LURE ? 0.5 : 0.35);
}

static inline void sim_marks_of(struct sim_segment *segment, uint64_t *state,
                                const struct sim_settings *settings,
                                const struct sim_person *person, int32_t who)
{
    for (size_t t = 0; t < segment->thing_count; t++) {
        const struct sim_thing *thing = &segment->things[t];
        double x = log(thing->snr / 10.0);
        double logit = thing->class == SIM_DIP ? person->a + 2.4 * x : person->b + 0.6 * x;
        if (sim_uniform(state) >= sim_logistic(logit + thing->effect))
            continue;
        double off = thing->length_d * (0.12 + 1.0 / thing->snr);
        double wider = thing->length_d * fabs(0.15 + 0.15 * sim_normal(state));
        double starts = thing->mid_d - 0.5 * (thing->length_d + wider) + off * sim_normal(state);
        double ends = thing->mid_d + 0.5 * (thing->length_d + wider) + off * sim_normal(state);
        sim_mark_add(segment, who, 0.5 * (starts + ends), fabs(ends - starts), (int)t,
                     sim_sure(state, settings, thing->class));
    }
    for (size_t k = sim_poisson(state, person->chance); k > 0; k--)
        sim_mark_add(segment, who, SIM_SEGMENT_D * sim_uniform(state),
                     sim_log_normal(state, 0.25, 0.7), -1, sim_sure(state, settings, SIM_NOTHING));
}

/* What two partners have agreed to mark here: the same places for both. */
static inline void sim_agreed_marks(struct sim_segment *segment, uint64_t *state,
                                    const struct sim_settings *settings, size_t number, int32_t who,
                                    int partner)
{
    int lower = who < partner ? who : partner;
    uint64_t agreed = settings->seed ^ (number * 1000003u + (uint64_t)lower * 7919u);
    for (size_t k = sim_poisson(&agreed, 0.5); k > 0; k--) {
        double mid = SIM_SEGMENT_D * sim_uniform(&agreed);
        double length = sim_log_normal(&agreed, 0.25, 0.7);
        sim_mark_add(segment, who, mid + 0.05 * length * sim_normal(state), length, -1,
                     sim_sure(state, settings, SIM_NOTHING));
    }
}

static inline void sim_segment_draw(struct sim_segment *segment, uint64_t *state,
                                    const struct sim_settings *settings,
                                    const struct sim_person *people, const double *reached,
                                    size_t number)
{
    segment->thing_count = segment->looks = segment->mark_count = 0;
    double kind = sim_uniform(state);
    segment->injected = kind < settings->injected;
    segment->inverted = !segment->injected && kind < settings->injected + settings->inverted;
    if (segment->injected)
        for (size_t k = 1 + sim_poisson(state, 0.5); k > 0; k--)
            sim_thing_add(segment, state, settings, SIM_DIP, true);
    size_t dips = sim_poisson(state, settings->dips), lures = sim_poisson(state, settings->lures);
    for (size_t k = 0; k < dips && !segment->inverted; k++)
        sim_thing_add(segment, state, settings, SIM_DIP, false);
    for (size_t k = 0; k < lures; k++)
        sim_thing_add(segment, state, settings, SIM_LURE, false);
    sim_draw_people(segment, state, settings, people, reached);
    for (size_t k = 0; k < segment->looks; k++) {
        int32_t who = segment->persons[k];
        sim_marks_of(segment, state, settings, &people[who], who);
        if (people[who].partner >= 0)
            sim_agreed_marks(segment, state, settings, number, who, people[who].partner);
    }
}

/* ---- from marks to items ---- */

static inline void sim_item_add(struct simulation *sim, struct consensus_item item,
                                struct sim_truth truth)
{
    if (sim->input.item_count == sim->item_room) {
        sim->item_room = 2 * sim->item_room + 256;
        sim->items = realloc(sim->items, sim->item_room * sizeof *sim->items);
        sim->truth = realloc(sim->truth, sim->item_room * sizeof *sim->truth);
    }
    assert(sim->items != NULL && sim->truth != NULL);
    sim->items[sim->input.item_count] = item;
    sim->truth[sim->input.item_count++] = truth;
}

static inline struct consensus_look *sim_looks_add(struct simulation *sim,
                                                   const struct sim_segment *segment)
{
    if (sim->input.look_count + segment->looks > sim->look_room) {
        sim->look_room = 2 * sim->look_room + 4096;
        sim->looks = realloc(sim->looks, sim->look_room * sizeof *sim->looks);
    }
    assert(sim->looks != NULL);
    struct consensus_look *looks = sim->looks + sim->input.look_count;
    for (size_t k = 0; k < segment->looks; k++)
        looks[k] = (struct consensus_look){.person = segment->persons[k]};
    sim->input.look_count += segment->looks;
    return looks;
}

static inline double sim_overlap(double starts, double ends, const struct sim_thing *thing)
{
    double left = thing->mid_d - 0.5 * thing->length_d, right = left + thing->length_d;
    double shared = fmin(ends, right) - fmax(starts, left);
    return shared <= 0.0 ? 0.0 : shared / (fmax(ends, right) - fmin(starts, left));
}

struct sim_group {
    double starts_d, ends_d;
    int origin; /* thing of most of its marks, or -1 */
    size_t of_origin;
};

/* Intervals (medians) and origins of the groups of a segment. */
static inline void sim_groups_sum(const struct sim_segment *segment, const size_t *of,
                                  size_t groups, struct sim_group *out)
{
    for (size_t g = 0; g < groups; g++) {
        double starts[1024], ends[1024], weights[1024], more[1024];
        size_t n = 0, votes[SIM_THINGS_MAX + 1] = {0};
        for (size_t m = 0; m < segment->mark_count; m++) {
            if (of[m] != g || n == 1024)
                continue;
            starts[n] = segment->marks[m].starts_d;
            ends[n] = segment->marks[m].ends_d;
            weights[n] = more[n] = 1.0;
            n++;
            votes[segment->origin[m] + 1]++;
        }
        out[g] = (struct sim_group){.origin = -1, .of_origin = votes[0]};
        for (size_t t = 0; t < segment->thing_count; t++)
            if (votes[t + 1] >= out[g].of_origin && votes[t + 1] > 0) {
                out[g].origin = (int)t;
                out[g].of_origin = votes[t + 1];
            }
        out[g].starts_d = consensus_weighted_median(starts, weights, n);
        out[g].ends_d = fmax(consensus_weighted_median(ends, more, n), out[g].starts_d + 0.02);
    }
}

/* The group that stands for a thing: by most marks, or for injected dips by overlap; SIZE_MAX:
 * none. */
static inline size_t sim_group_of(const struct sim_segment *segment, const struct sim_group *groups,
                                  size_t count, size_t thing)
{
    size_t best = SIZE_MAX;
    double most = 0.0;
    for (size_t g = 0; g < count; g++) {
        double says =
            segment->things[thing].injected
                ? sim_overlap(groups[g].starts_d, groups[g].ends_d, &segment->things[thing]) - 0.1
            : groups[g].origin == (int)thing ? (double)groups[g].of_origin
                                             : 0.0;
        if (says > most) {
            most = says;
            best = g;
        }
    }
    return best;
}

/* The SNR at a group: of what lies there, or of nothing. */
static inline double sim_measure(const struct sim_segment *segment, const struct sim_group *group,
                                 uint64_t *state)
{
    double nothing = 1.0 + fabs(sim_normal(state)), most = 0.25;
    if (group->origin >= 0)
        return segment->things[group->origin].measured_snr;
    for (size_t t = 0; t < segment->thing_count; t++) {
        double overlap = sim_overlap(group->starts_d, group->ends_d, &segment->things[t]);
        if (overlap > most) {
            most = overlap;
            nothing = segment->things[t].measured_snr;
        }
    }
    return nothing;
}

static inline void sim_groups_put(struct simulation *sim, const struct sim_segment *segment,
                                  const size_t *of, const struct sim_group *groups, size_t count,
                                  uint64_t *state)
{
    size_t stands[SIM_THINGS_MAX];
    for (size_t t = 0; t < segment->thing_count; t++)
        stands[t] = sim_group_of(segment, groups, count, t);
    for (size_t g = 0; g < count; g++) {
        const struct sim_group *group = &groups[g];
        struct consensus_item item = {.first_look = sim->input.look_count,
                                      .looks = segment->looks,
                                      .snr = sim_measure(segment, group, state),
                                      .duration_d = group->ends_d - group->starts_d,
                                      .known =
                                          segment->inverted ? CONSENSUS_NOT_DIP : CONSENSUS_FREE,
                                      .control = segment->injected || segment->inverted};
        struct sim_truth truth = {.survey = !item.control};
        if (group->origin >= 0) {
            truth.class = segment->things[group->origin].class;
            truth.again = truth.class == SIM_DIP && stands[group->origin] != g;
        }
        for (size_t t = 0; t < segment->thing_count; t++)
            if (segment->things[t].injected && stands[t] == g)
                item.known = CONSENSUS_DIP;
        struct consensus_look *looks = sim_looks_add(sim, segment);
        double mid = 0.5 * (group->starts_d + group->ends_d);
        for (size_t m = 0; m < segment->mark_count; m++)
            for (size_t k = 0; of[m] == g && k < segment->looks; k++)
                if (looks[k].person == segment->marks[m].person) {
                    const struct consensus_mark *mark = &segment->marks[m];
                    looks[k].marked = 1;
                    looks[k].sure = (uint8_t)mark->sure;
                    looks[k].centre_d = (float)(0.5 * (mark->starts_d + mark->ends_d) - mid);
                }
        sim_item_add(sim, item, truth);
    }
    for (size_t t = 0; t < segment->thing_count; t++)
        if (segment->things[t].injected && stands[t] == SIZE_MAX) {
            struct consensus_item item = {.first_look = sim->input.look_count,
                                          .looks = segment->looks,
                                          .snr = segment->things[t].measured_snr,
                                          .duration_d = segment->things[t].length_d,
                                          .known = CONSENSUS_DIP,
                                          .control = 1};
            (void)sim_looks_add(sim, segment);
            sim_item_add(sim, item, (struct sim_truth){.class = SIM_DIP});
        }
}

static inline void sim_segment_put(struct simulation *sim, const struct sim_segment *segment,
                                   uint64_t *state)
{
    size_t *sorted = calloc(2 * SIM_MARKS_MAX, sizeof *sorted), *group = sorted + SIM_MARKS_MAX;
    size_t *of = calloc(SIM_MARKS_MAX, sizeof *of), count = 0;
    struct base_error error = {0};
    bool ok =
        sorted != NULL && of != NULL &&
        consensus_group_marks(segment->marks, segment->mark_count, sorted, group, &count, &error);
    struct sim_group *groups = calloc(count + 1, sizeof *groups);
    if (!ok || groups == NULL)
        abort();
    for (size_t i = 0; i < segment->mark_count; i++)
        of[sorted[i]] = group[i];
    sim_groups_sum(segment, of, count, groups);
    sim_groups_put(sim, segment, of, groups, count, state);
    for (size_t t = 0; t < segment->thing_count; t++) {
        bool survey = !segment->injected && !segment->inverted;
        sim->survey_dips += survey && segment->things[t].class == SIM_DIP;
        sim->survey_lures += survey && segment->things[t].class == SIM_LURE;
    }
    free(groups);
    free(of);
    free(sorted);
}

/* ---- the campaign ---- */

static inline void sim_people_draw(struct simulation *sim, const struct sim_settings *settings,
                                   uint64_t *state)
{
    size_t n = settings->people, *place = calloc(n, sizeof *place);
    if (place == NULL)
        abort();
    for (size_t j = 0; j < n; j++)
        place[j] = j;
    for (size_t j = n; j-- > 1;) {
        size_t k = (size_t)(sim_uniform(state) * (double)(j + 1)), kept = place[j];
        place[j] = place[k];
        place[k] = kept;
    }
    size_t random = (size_t)(settings->random * (double)n + 0.5);
    size_t never = (size_t)(settings->never * (double)n + 0.5);
    size_t in_pairs = (size_t)(settings->in_pairs * (double)n + 0.5) / 2 * 2;
    for (size_t i = 0; i < n; i++) {
        struct sim_person *person = &sim->people[place[i]];
        person->activity = settings->even ? 1.0 : pow((double)place[i] + 1.0, -0.9);
        person->partner = -1;
        person->a = 0.6 + 0.8 * sim_normal(state);
        person->b = -1.3 + 0.8 * sim_normal(state) - 0.5 * (person->a - 0.6);
        person->chance = sim_log_normal(state, settings->chance, 0.7);
        if (i < random) {
            person->a = person->b = -2.5;
            person->chance = 2.0;
        } else if (i < random + never) {
            person->a = person->b = -5.0;
            person->chance = 0.0;
        } else if (i < random + never + in_pairs) {
            size_t partner = (i - random - never) % 2 == 0 ? i + 1 : i - 1;
            person->partner = (int)place[partner];
        }
    }
    free(place);
}

static inline struct simulation sim_new(const struct sim_settings *settings)
{
    struct simulation sim = {.people = calloc(settings->people, sizeof *sim.people),
                             .days = calloc(settings->people, sizeof *sim.days)};
    double *reached = calloc(settings->people, sizeof *reached), sum = 0.0;
    struct sim_segment *segment = calloc(1, sizeof *segment);
    if (sim.people == NULL || sim.days == NULL || reached == NULL || segment == NULL)
        abort();
    uint64_t state = settings->seed * 0x2545f4914f6cdd1du + 1;
    sim_people_draw(&sim, settings, &state);
    for (size_t j = 0; j < settings->people; j++)
        reached[j] = sum += sim.people[j].activity;
    for (size_t s = 0; s < settings->segments; s++) {
        sim_segment_draw(segment, &state, settings, sim.people, reached, s);
        sim_segment_put(&sim, segment, &state);
        sim.reviews += segment->looks;
        for (size_t k = 0; k < segment->looks; k++)
            sim.days[segment->persons[k]] += SIM_SEGMENT_D;
        if (!segment->injected && !segment->inverted)
            sim.input.days_total += SIM_SEGMENT_D;
    }
    free(segment);
    free(reached);
    sim.input.items = sim.items;
    sim.input.looks = sim.looks;
    sim.input.people = settings->people;
    sim.input.days_looked = sim.days;
    return sim;
}

static inline void sim_free(struct simulation *sim)
{
    free(sim->items);
    free(sim->looks);
    free(sim->truth);
    free(sim->people);
    free(sim->days);
    *sim = (struct simulation){0};
}

#endif
