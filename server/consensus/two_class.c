/*
 * The two-class form: each group is a dip or it is not, each reviewer has a hit rate and a chance
 * rate, after Dawid & Skene (1979) with Beta priors drawn towards the whole crowd's rates, so that
 * somebody seen once or twice is neither trusted nor doubted without reason.
 */
#include <assert.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/consensus_model.h"
#include "input.h"
#include "interval.h"

#define PRIOR_LOOKS 4.0 /* weight of the crowd's rate against a reviewer's own, in looks */
#define HIT_START 0.7   /* where the crowd's rates start, and what they are drawn to a little */
#define CHANCE_START 0.1
#define CROWD_LOOKS 10.0 /* weight of those two */
#define RATE_LEAST 1e-4

struct fit {
    const struct consensus_input *input;
    double *probability;           /* items */
    double *hit, *chance;          /* people: rates */
    double *dip_looks, *dip_marks; /* people: expected looks at dips, and marks there */
    double *other_looks, *other_marks;
    double crowd_hit, crowd_chance, prior;
};

static double clamped(const struct consensus_item *item, double probability)
{
    return item->known == CONSENSUS_DIP       ? 1.0
           : item->known == CONSENSUS_NOT_DIP ? 0.0
                                              : probability;
}

static void start_from_votes(struct fit *fit)
{
    for (size_t i = 0; i < fit->input->item_count; i++) {
        const struct consensus_item *item = &fit->input->items[i];
        const struct consensus_look *looks = fit->input->looks + item->first_look;
        double marks = 0.0;
        for (size_t k = 0; k < item->looks; k++)
            marks += looks[k].marked;
        /* Half a vote either way, so that one of one is not certain. */
        fit->probability[i] = clamped(item, (marks + 0.25) / ((double)item->looks + 1.0));
    }
}

static double between(double rate)
{
    return fmin(fmax(rate, RATE_LEAST), 1.0 - RATE_LEAST);
}

/* Rates and the share of dips from the probabilities. */
static void estimate(struct fit *fit)
{
    const struct consensus_input *input = fit->input;
    size_t people = input->people;
    double sums[4] = {0.0, 0.0, 0.0, 0.0}, dips = 0.0;
    memset(fit->dip_looks, 0, people * sizeof(double));
    memset(fit->dip_marks, 0, people * sizeof(double));
    memset(fit->other_looks, 0, people * sizeof(double));
    memset(fit->other_marks, 0, people * sizeof(double));
    for (size_t i = 0; i < input->item_count; i++) {
        double p = fit->probability[i];
        dips += p;
        for (size_t k = 0; k < input->items[i].looks; k++) {
            const struct consensus_look *look = &input->looks[input->items[i].first_look + k];
            fit->dip_looks[look->person] += p;
            fit->dip_marks[look->person] += p * look->marked;
            fit->other_looks[look->person] += 1.0 - p;
            fit->other_marks[look->person] += (1.0 - p) * look->marked;
        }
    }
    for (size_t j = 0; j < people; j++) {
        sums[0] += fit->dip_looks[j];
        sums[1] += fit->dip_marks[j];
        sums[2] += fit->other_looks[j];
        sums[3] += fit->other_marks[j];
    }
    fit->crowd_hit = (sums[1] + CROWD_LOOKS * HIT_START) / (sums[0] + CROWD_LOOKS);
    fit->crowd_chance = (sums[3] + CROWD_LOOKS * CHANCE_START) / (sums[2] + CROWD_LOOKS);
    for (size_t j = 0; j < people; j++) {
        fit->hit[j] = between((fit->dip_marks[j] + PRIOR_LOOKS * fit->crowd_hit) /
                              (fit->dip_looks[j] + PRIOR_LOOKS));
        fit->chance[j] = between((fit->other_marks[j] + PRIOR_LOOKS * fit->crowd_chance) /
                                 (fit->other_looks[j] + PRIOR_LOOKS));
    }
    fit->prior = (dips + 1.0) / ((double)input->item_count + 2.0);
}

/* Log odds of a dip from the looks alone. */
static double looks_term(const struct fit *fit, const struct consensus_item *item, double *dip,
                         double *other)
{
    const struct consensus_look *looks = fit->input->looks + item->first_look;
    *dip = *other = 0.0;
    for (size_t k = 0; k < item->looks; k++) {
        double hit = fit->hit[looks[k].person], chance = fit->chance[looks[k].person];
        *dip += log(looks[k].marked ? hit : 1.0 - hit);
        *other += log(looks[k].marked ? chance : 1.0 - chance);
    }
    return *dip - *other;
}

/* Probabilities from the rates; the penalised log-likelihood as a by-product. */
static double classify(struct fit *fit)
{
    double total = log(fit->prior) + log1p(-fit->prior);
    for (size_t i = 0; i < fit->input->item_count; i++) {
        const struct consensus_item *item = &fit->input->items[i];
        double dip, other;
        (void)looks_term(fit, item, &dip, &other);
        dip += log(fit->prior);
        other += log1p(-fit->prior);
        double most = fmax(dip, other);
        fit->probability[i] = clamped(item, 1.0 / (1.0 + exp(other - dip)));
        total += item->known == CONSENSUS_DIP ? dip
                 : item->known == CONSENSUS_NOT_DIP
                     ? other
                     : most + log(exp(dip - most) + exp(other - most));
    }
    for (size_t j = 0; j < fit->input->people; j++)
        total += PRIOR_LOOKS *
                 (fit->crowd_hit * log(fit->hit[j]) + (1.0 - fit->crowd_hit) * log1p(-fit->hit[j]) +
                  fit->crowd_chance * log(fit->chance[j]) +
                  (1.0 - fit->crowd_chance) * log1p(-fit->chance[j]));
    return total;
}

static struct consensus_rate rate_of(double value, double marks, double looks, double crowd)
{
    double a = marks + PRIOR_LOOKS * crowd, b = looks - marks + PRIOR_LOOKS * (1.0 - crowd);
    a = fmax(a, 1e-3);
    b = fmax(b, 1e-3);
    return (struct consensus_rate){value, interval_beta_quantile(0.05, a, b),
                                   interval_beta_quantile(0.95, a, b)};
}

static void answer(const struct fit *fit, struct consensus_output *out)
{
    const struct consensus_rate unknown = {NAN, NAN, NAN};
    for (size_t i = 0; i < fit->input->item_count; i++) {
        double dip, other, prior = log(fit->prior) - log1p(-fit->prior);
        double looks = looks_term(fit, &fit->input->items[i], &dip, &other);
        out->answers[i] = (struct consensus_answer){.probability = fit->probability[i],
                                                    .log_odds = looks + prior,
                                                    .marks_only_probability = fit->probability[i],
                                                    .term_looks = looks,
                                                    .term_prior = prior,
                                                    .lure = 0.0,
                                                    .nothing = 1.0 - fit->probability[i],
                                                    .low = NAN,
                                                    .high = NAN};
    }
    for (size_t j = 0; j < fit->input->people; j++)
        out->skills[j] = (struct consensus_skill){
            .hit = rate_of(fit->hit[j], fit->dip_marks[j], fit->dip_looks[j], fit->crowd_hit),
            .chance = rate_of(fit->chance[j], fit->other_marks[j], fit->other_looks[j],
                              fit->crowd_chance),
            .weight = fmax(fit->hit[j] - fit->chance[j], 0.0),
            .hit_snr5 = unknown,
            .hit_snr20 = unknown,
            .lure = unknown,
            .chance_per_30_d = unknown};
    out->prior = fit->prior;
}

static void iterate(struct fit *fit, const struct consensus_settings *settings,
                    struct consensus_output *out)
{
    double before = -INFINITY;
    start_from_votes(fit);
    estimate(fit);
    while (out->rounds < settings->rounds_max && !out->converged) {
        out->log_likelihood = classify(fit);
        estimate(fit);
        out->rounds++;
        out->converged = fabs(out->log_likelihood - before) <=
                         settings->tolerance * fmax(fabs(out->log_likelihood), 1.0);
        before = out->log_likelihood;
    }
}

bool consensus_fit_two_class(const struct consensus_input *input,
                             const struct consensus_settings *settings,
                             struct consensus_output *output, struct base_error *error)
{
    *output = (struct consensus_output){0};
    if (!input_in_range(input, error))
        return false;
    double *rates = calloc(6 * input->people + input->item_count + 1, sizeof *rates);
    output->answers = calloc(input->item_count + 1, sizeof *output->answers);
    output->skills = calloc(input->people + 1, sizeof *output->skills);
    bool ok = rates != NULL && output->answers != NULL && output->skills != NULL;
    if (!ok)
        (void)base_fail(error, BASE_MEMORY, "There is no memory for the consensus.");
    if (ok) {
        size_t n = input->people;
        struct fit fit = {.input = input,
                          .hit = rates,
                          .chance = rates + n,
                          .dip_looks = rates + 2 * n,
                          .dip_marks = rates + 3 * n,
                          .other_looks = rates + 4 * n,
                          .other_marks = rates + 5 * n,
                          .probability = rates + 6 * n};
        iterate(&fit, settings, output);
        answer(&fit, output);
    } else {
        consensus_output_free(output);
    }
    free(rates);
    return ok;
}
