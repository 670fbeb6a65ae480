/*
 * The three-class fit as a whole: arrays, start, rounds.
 */
#include "ebbmark/consensus_model.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "fit.h"
#include "input.h"

#define LOOKS_A_BLOCK 4096
#define STEP_LEAST (1.0 / 1024.0)

void consensus_output_free(struct consensus_output *output)
{
    free(output->answers);
    free(output->skills);
    free(output->people);
    *output = (struct consensus_output){0};
}

/* ---- arrays ---- */

static void fit_free(struct fit *fit)
{
    free(fit->people);
    free(fit->people_before);
    free(fit->people_next);
    free(fit->leans);
    free(fit->factors);
    free(fit->groups);
    free(fit->pairs);
    free(fit->first_of_person);
    free(fit->of_person);
    free(fit->blocks);
    free(fit->block_sums);
    free(fit->people_sums);
}

/* Groups in blocks of about LOOKS_A_BLOCK looks. Returns how many; fills blocks unless NULL. */
static size_t cut_blocks(const struct consensus_input *input, struct fit_block *blocks)
{
    size_t count = 0, looks = 0;
    for (size_t g = 0; g < input->item_count; g++) {
        if (g == 0 || looks >= LOOKS_A_BLOCK) {
            if (blocks != NULL)
                blocks[count] = (struct fit_block){g, 0};
            count++;
            looks = 0;
        }
        if (blocks != NULL)
            blocks[count - 1].count++;
        looks += input->items[g].looks + 1;
    }
    return count;
}

static bool fit_open(struct fit *fit, struct base_error *error)
{
    const struct consensus_input *input = fit->input;
    size_t people = input->people + 1, looks = input->look_count + 1;
    fit->block_count = cut_blocks(input, NULL);
    fit->people_block_count = (input->people + FIT_PEOPLE_A_BLOCK - 1) / FIT_PEOPLE_A_BLOCK;
    fit->people = calloc(people, sizeof *fit->people);
    fit->people_before = calloc(people, sizeof *fit->people_before);
    fit->people_next = calloc(people, sizeof *fit->people_next);
    fit->leans = calloc(people, sizeof *fit->leans);
    fit->factors = calloc(people, sizeof *fit->factors);
    fit->groups = calloc(input->item_count + 1, sizeof *fit->groups);
    fit->pairs = calloc(looks, sizeof *fit->pairs);
    fit->first_of_person = calloc(people + 1, sizeof *fit->first_of_person);
    fit->of_person = calloc(looks + FIT_AHEAD, sizeof *fit->of_person);
    fit->blocks = calloc(fit->block_count + 1, sizeof *fit->blocks);
    fit->block_sums = calloc(fit->block_count + 1, sizeof *fit->block_sums);
    fit->people_sums = calloc(fit->people_block_count + 1, sizeof *fit->people_sums);
    bool ok = fit->people != NULL && fit->people_before != NULL && fit->people_next != NULL &&
              fit->leans != NULL && fit->factors != NULL && fit->groups != NULL &&
              fit->pairs != NULL && fit->first_of_person != NULL && fit->of_person != NULL &&
              fit->blocks != NULL && fit->block_sums != NULL && fit->people_sums != NULL;
    if (ok)
        (void)cut_blocks(input, fit->blocks);
    return ok || base_fail(error, BASE_MEMORY, "There is no memory for the consensus.");
}

/* The looks of each person, in their order. */
static void index_people(struct fit *fit)
{
    const struct consensus_input *input = fit->input;
    size_t *first = fit->first_of_person;
    for (size_t k = 0; k < input->look_count; k++)
        first[input->looks[k].person + 1]++;
    for (size_t j = 0; j < input->people; j++)
        first[j + 1] += first[j];
    /* Filling moves each start to the next one's; moving them back by one place mends that. */
    for (size_t k = 0; k < input->look_count; k++)
        fit->of_person[first[input->looks[k].person]++] = k;
    memmove(first + 1, first, input->people * sizeof *first);
    first[0] = 0;
}

static void describe_group(const struct consensus_input *input, size_t g, struct fit_group *group)
{
    const struct consensus_item *item = &input->items[g];
    const struct consensus_look *looks = input->looks + item->first_look;
    double duration = item->duration_d > 0.0 ? item->duration_d : 1.0, sum = 0.0;
    group->x = item->snr == item->snr ? log(fmin(fmax(item->snr, 1.0), 1e6) / 10.0) : NAN;
    group->complete = item->control && item->known == CONSENSUS_DIP;
    for (size_t k = 0; k < item->looks; k++)
        if (looks[k].marked) {
            group->marks++;
            group->sure += looks[k].sure != 0;
            sum += (double)looks[k].centre_d;
        }
    group->log_orders = lgamma(group->marks + 1.0);
    if (group->marks == 0.0)
        return;
    for (size_t k = 0; k < item->looks; k++) {
        double off = ((double)looks[k].centre_d - sum / group->marks) / duration;
        group->spread += looks[k].marked ? off * off : 0.0;
    }
    group->log_time = -0.5 * (group->marks - 1.0) * log(2.0 * M_PI * duration * duration) -
                      0.5 * log(group->marks);
}

/* ---- start ---- */

/* Rates from vote fractions: a group that most marked is taken for a dip, one that several marked
 * for a lure, one that a single one marked for chance. */
static void start_rates(struct fit *fit)
{
    const struct consensus_input *input = fit->input;
    double dips = 0.5, lures = 0.5, chance = 0.5, days = 0.0;
    for (size_t g = 0; g < input->item_count; g++) {
        const struct fit_group *group = &fit->groups[g];
        double share = group->marks / fmax((double)input->items[g].looks, 1.0);
        if (input->items[g].control)
            continue;
        bool several = group->marks > 1.0;
        dips += several ? share : 0.1 * share;
        lures += several ? 1.0 - share : 0.2;
        chance += several ? 0.0 : 0.7;
    }
    for (size_t j = 0; j < input->people; j++)
        days += fmax(input->days_looked[j], 0.0);
    fit->common.dips_per_d = dips / fmax(input->days_total, 1.0);
    fit->common.lures_per_d = lures / fmax(input->days_total, 1.0);
    fit->common.together_per_d = lures / fmax(input->days_total, 1.0);
    fit->common.chance_per_d = chance / fmax(days, 1.0);
}

static void start(struct fit *fit)
{
    const struct consensus_start *from = fit->settings->start;
    fit->common = fit_common_start();
    start_rates(fit);
    if (from != NULL && from->common != NULL)
        fit->common = *from->common;
    struct consensus_person typical = {fit->common.hit_mean, fit->common.lure_mean,
                                       log(fit->common.chance_per_d), 0.0};
    for (size_t j = 0; j < fit->input->people; j++) {
        fit->people[j] = typical;
        if (from == NULL || j >= from->people_count)
            continue;
        const struct consensus_person *person = &from->people[j];
        if (isfinite(person->hit_logit) && isfinite(person->lure_logit) &&
            isfinite(person->log_chance_per_d) && isfinite(person->log_together))
            fit->people[j] = *person;
    }
}

/* ---- rounds ---- */

/* Go `far` of the way, at most 1, from where the last accepted sums were taken to where their step
 * led. What must stay positive goes by its logarithm. */
static double between(double from, double to, double far)
{
    return from + far * (to - from);
}

static double between_logs(double from, double to, double far)
{
    return exp(between(log(from), log(to), far));
}

static void go(struct fit *fit, double far)
{
    const struct consensus_common *from = &fit->common_before, *to = &fit->common_next;
    struct consensus_common *at = &fit->common;
    *at = *to;
    at->beta = between(from->beta, to->beta, far);
    at->gamma = between(from->gamma, to->gamma, far);
    at->tau_dip = fmin(fmax(between(from->tau_dip, to->tau_dip, far), FIT_TAU_LEAST), FIT_TAU_MOST);
    at->tau_lure =
        fmin(fmax(between(from->tau_lure, to->tau_lure, far), FIT_TAU_LEAST), FIT_TAU_MOST);
    at->kappa = between_logs(from->kappa, to->kappa, far);
    for (size_t j = 0; j < fit->input->people; j++) {
        const struct consensus_person *one = &fit->people_before[j], *two = &fit->people_next[j];
        fit->people[j] =
            (struct consensus_person){between(one->hit_logit, two->hit_logit, far),
                                      between(one->lure_logit, two->lure_logit, far),
                                      between(one->log_chance_per_d, two->log_chance_per_d, far),
                                      between(one->log_together, two->log_together, far)};
    }
}

/* Keep the present numbers as where the next step starts from. */
static void keep(struct fit *fit)
{
    fit->common_before = fit->common;
    memcpy(fit->people_before, fit->people, fit->input->people * sizeof *fit->people);
}

/* Sums at the present numbers, and the penalised log-likelihood. */
static double judge(struct fit *fit)
{
    fit_sums(fit);
    return fit->sums.objective + fit_prior(fit);
}

/* Rounds go in pairs: after the first all but the population moves, so that the objective of the
 * second can be held against the first's; if it fell, the step was too long and is taken again,
 * shorter. After the second the population moves. */
static void iterate(struct fit *fit, struct consensus_output *out)
{
    const struct consensus_settings *settings = fit->settings;
    double before = -INFINITY, last = -INFINITY, far = 1.0;
    while (out->rounds < settings->rounds_max && !out->converged) {
        bool second = settings->hold || out->rounds % 2 == 1;
        double now = judge(fit);
        while (second && now < before - 1e-13 * fabs(before) && far > STEP_LEAST) {
            far *= 0.5;
            go(fit, far);
            now = judge(fit);
        }
        out->rounds++;
        out->log_likelihood = now;
        if (settings->watch != NULL)
            settings->watch(settings->watch_context, out->rounds, now);
        double change = fabs(now - last);
        out->converged = second && change <= settings->tolerance * fmax(fabs(now), 1.0);
        last = second ? now : last;
        before = now;
        keep(fit);
        if (second && !settings->hold) {
            fit_step_population(fit);
        } else {
            fit_step(fit);
        }
        far = 1.0;
        go(fit, far);
    }
    /* The answers are of the numbers that were judged, not of the step after them. */
    fit->common = fit->common_before;
    memcpy(fit->people, fit->people_before, fit->input->people * sizeof *fit->people);
}

bool consensus_fit(const struct consensus_input *input, const struct consensus_settings *settings,
                   struct consensus_output *output, struct base_error *error)
{
    *output = (struct consensus_output){0};
    struct fit fit = {.input = input, .settings = settings};
    bool ok = input_in_range(input, error) && fit_open(&fit, error);
    if (ok) {
        output->answers = calloc(input->item_count + 1, sizeof *output->answers);
        output->skills = calloc(input->people + 1, sizeof *output->skills);
        output->people = calloc(input->people + 1, sizeof *output->people);
        ok = (output->answers != NULL && output->skills != NULL && output->people != NULL) ||
             base_fail(error, BASE_MEMORY, "There is no memory for the consensus.");
    }
    if (ok) {
        index_people(&fit);
        for (size_t g = 0; g < input->item_count; g++)
            describe_group(input, g, &fit.groups[g]);
        start(&fit);
        iterate(&fit, output);
        ok = fit_answers(&fit, output, error);
    }
    if (!ok)
        consensus_output_free(output);
    fit_free(&fit);
    return ok;
}
