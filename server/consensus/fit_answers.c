#include <math.h>
#include <stdlib.h>

#include "fit.h"
#include "interval.h"

#define Z_90 1.6448536269514722
/* Which groups are lures is known so badly that the curvature says too little: over simulated
 * campaigns the errors of lure logits were 1.1 times what it led to expect. */
#define LURE_WIDEN 1.2
#define CROWD_LOOKS                                                                                \
    4.0 /* weight of the crowd's rate in a reviewer's rate at groups that are no dip */

static double logistic(double logit)
{
    return 1.0 / (1.0 + exp(-logit));
}

static double capped(double log_odds)
{
    return log_odds > 700.0 ? 700.0 : log_odds < -700.0 ? -700.0 : log_odds;
}

static struct consensus_rate rate_of_logit(double logit, double variance)
{
    double reach = Z_90 * sqrt(fmax(variance, 0.0));
    return (struct consensus_rate){logistic(logit), logistic(logit - reach),
                                   logistic(logit + reach)};
}

/* The quantile of a Gamma distribution of that shape, >= 1, and mean 1, by Wilson and Hilferty's
 * cube. */
static double gamma_quantile(double shape, double z)
{
    double root = 1.0 - 1.0 / (9.0 * shape) + z / (3.0 * sqrt(shape));
    return root > 0.0 ? root * root * root : 0.0;
}

/* ---- reviewers ---- */

/* What is not known of the numbers common to all, beside what is not known of one reviewer. */
struct doubt {
    double mean[FIT_SIDES];   /* variance of the population's mean */
    double growth[FIT_SIDES]; /* variance of beta, gamma */
    double middle[FIT_SIDES]; /* x at which growth and logits do not hang together */
};

/* One reviewer, beside their numbers. */
struct share {
    double variance[FIT_SIDES]; /* of the logits, at the middle */
    double chance;              /* expected chance marks, and the prior's one */
    double others, other_marks; /* expected looks at groups that are no dip, and marks there */
};

/* From the sums of an ordinary round. */
static struct doubt growth_doubt(const struct fit *fit)
{
    struct doubt doubt = {0};
    for (int side = 0; side < FIT_SIDES; side++) {
        const struct fit_sums *sums = &fit->sums;
        doubt.middle[side] = sums->curve_x[side] / (sums->all_curve[side] + 1e-9);
        double curve = sums->slope_curve[side] - doubt.middle[side] * sums->curve_x[side];
        double sd = side == FIT_DIP ? FIT_BETA_SD : FIT_GAMMA_SD;
        doubt.growth[side] = 1.0 / (fmax(curve, 0.0) + 1.0 / (sd * sd));
    }
    return doubt;
}

static void share_curves(const struct fit *fit, struct share *shares)
{
    for (size_t j = 0; j < fit->input->people; j++) {
        shares[j].chance = 1.0;
        for (size_t k = fit->first_of_person[j]; k < fit->first_of_person[j + 1]; k++) {
            const struct fit_pair *pair = &fit->pairs[fit->of_person[k]];
            shares[j].variance[FIT_DIP] += (double)pair->curve[FIT_DIP];
            shares[j].variance[FIT_LURE] += (double)pair->curve[FIT_LURE];
            shares[j].chance += (double)pair->alone;
        }
    }
}

/* Variances from the curves that share_curves left in their place. A logit that is little known is
 * drawn to the population's mean, and so shares in the doubt about that. */
static void share_variances(const struct fit *fit, struct share *shares, struct doubt *doubt)
{
    const double spread[FIT_SIDES] = {fit->common.hit_sd, fit->common.lure_sd};
    const double widen[FIT_SIDES] = {1.0, LURE_WIDEN};
    for (int side = 0; side < FIT_SIDES; side++) {
        double pull = 1.0 / (spread[side] * spread[side]), known = 1e-3;
        for (size_t j = 0; j < fit->input->people; j++) {
            double curve = fmax(shares[j].variance[side], 0.0);
            known += pull * curve / (curve + pull);
        }
        doubt->mean[side] = 1.0 / known;
        for (size_t j = 0; j < fit->input->people; j++) {
            double all = fmax(shares[j].variance[side], 0.0) + pull, drawn = pull / all;
            shares[j].variance[side] =
                widen[side] * (1.0 / all + drawn * drawn * doubt->mean[side]);
        }
    }
}

/* Looks at groups that are no dip; returns the crowd's rate of marks there. */
static double share_others(const struct fit *fit, struct share *shares)
{
    const struct consensus_input *input = fit->input;
    double looks = 1.0, marks = 0.1;
    for (size_t g = 0; g < input->item_count; g++) {
        double other = 1.0 - fit->groups[g].probability[FIT_DIP];
        for (size_t k = 0; k < input->items[g].looks; k++) {
            const struct consensus_look *look = &input->looks[input->items[g].first_look + k];
            shares[look->person].others += other;
            shares[look->person].other_marks += look->marked ? other : 0.0;
            looks += other;
            marks += look->marked ? other : 0.0;
        }
    }
    return fmin(marks / looks, 1.0);
}

static struct consensus_rate rate_at_others(const struct share *share, double crowd)
{
    double marks = fmax(share->other_marks + CROWD_LOOKS * crowd, 1e-3);
    double rest = fmax(share->others - share->other_marks + CROWD_LOOKS * (1.0 - crowd), 1e-3);
    return (struct consensus_rate){marks / (marks + rest),
                                   interval_beta_quantile(0.05, marks, rest),
                                   interval_beta_quantile(0.95, marks, rest)};
}

/* The rate at x. */
static struct consensus_rate rate_at(const struct fit *fit, size_t j, const struct share *share,
                                     const struct doubt *doubt, int side, double x)
{
    const struct consensus_person *person = &fit->people[j];
    double off = x - doubt->middle[side];
    double logit = side == FIT_DIP ? person->hit_logit : person->lure_logit;
    return rate_of_logit(logit + fit_growth(&fit->common, side) * x,
                         share->variance[side] + off * off * doubt->growth[side]);
}

static void skill_answer(const struct fit *fit, size_t j, const struct share *share,
                         const struct doubt *doubt, double crowd, struct consensus_skill *skill)
{
    const struct consensus_person *person = &fit->people[j];
    double per_30_d = 30.0 * exp(person->log_chance_per_d);
    skill->hit = rate_at(fit, j, share, doubt, FIT_DIP, 0.0);
    skill->hit_snr5 = rate_at(fit, j, share, doubt, FIT_DIP, -log(2.0));
    skill->hit_snr20 = rate_at(fit, j, share, doubt, FIT_DIP, log(2.0));
    skill->lure = rate_at(fit, j, share, doubt, FIT_LURE, 0.0);
    skill->chance_per_30_d =
        (struct consensus_rate){per_30_d, per_30_d * gamma_quantile(share->chance, -Z_90),
                                per_30_d * gamma_quantile(share->chance, Z_90)};
    skill->chance = rate_at_others(share, crowd);
    skill->weight = fmax(skill->hit.value - skill->chance.value, 0.0);
}

/* ---- groups ---- */

/* Log odds of a dip when `less` is taken off the three joint log-likelihoods. */
static double log_odds_without(const struct fit_group *group, const double less[FIT_CLASSES])
{
    return capped(group->log_class[FIT_DIP] - less[FIT_DIP] -
                  fit_log_sum(group->log_class[FIT_LURE] - less[FIT_LURE],
                              group->log_class[FIT_NOTHING] - less[FIT_NOTHING]));
}

/* Variance of the log odds, from what is not known of the reviewers. */
static double log_odds_variance(const struct fit *fit, size_t g, const struct share *shares)
{
    const struct consensus_item *item = &fit->input->items[g];
    const struct fit_group *group = &fit->groups[g];
    double not_dip = fit_log_sum(group->log_class[FIT_LURE], group->log_class[FIT_NOTHING]);
    double lure = exp(group->log_class[FIT_LURE] - not_dip);
    double alone = exp(group->log_class[FIT_NOTHING] - not_dip) * (1.0 - group->together);
    double sum = 0.0;
    for (size_t k = 0; k < item->looks; k++) {
        const struct consensus_look *look = &fit->input->looks[item->first_look + k];
        const struct fit_pair *pair = &fit->pairs[item->first_look + k];
        const struct share *share = &shares[look->person];
        double by_dip = (double)pair->slope[FIT_DIP];
        double by_lure = lure * (double)pair->slope[FIT_LURE];
        sum += by_dip * by_dip * share->variance[FIT_DIP] +
               by_lure * by_lure * share->variance[FIT_LURE];
        if (look->marked)
            sum += alone * alone / share->chance;
    }
    return sum;
}

static void group_answer(const struct fit *fit, size_t g, const struct share *shares, double prior,
                         struct consensus_answer *answer)
{
    const struct consensus_item *item = &fit->input->items[g];
    const struct fit_group *group = &fit->groups[g];
    /* Without agreement in time: as if the centres lay anywhere within a duration. */
    double duration = item->duration_d > 0.0 ? item->duration_d : 1.0;
    double time = fit_log_time(fit, group) + fmax(group->marks - 1.0, 0.0) * log(duration);
    double less[FIT_CLASSES] = {0.0, 0.0, 0.0};
    answer->log_odds = log_odds_without(group, less);
    for (int c = 0; c < FIT_CLASSES; c++)
        less[c] += fit_log_density(fit, group, c);
    /* Of what is nothing, only marks made together agree in time. */
    double nothing = group->log_class[FIT_NOTHING] -
                     fit_log_sum(group->log_alone, group->log_together) +
                     fit_log_sum(group->log_alone, group->log_together - time);
    double marks_only = log_odds_without(group, less);
    less[FIT_DIP] += time;
    less[FIT_LURE] += time;
    less[FIT_NOTHING] += group->log_class[FIT_NOTHING] - nothing;
    double without_time = log_odds_without(group, less);
    answer->term_snr = answer->log_odds - marks_only;
    answer->term_time = marks_only - without_time;
    answer->term_prior = log(prior) - log1p(-prior);
    answer->term_looks = without_time - answer->term_prior;
    answer->probability = group->probability[FIT_DIP];
    answer->lure = group->probability[FIT_LURE];
    answer->nothing = group->probability[FIT_NOTHING];
    answer->marks_only_probability =
        item->known == CONSENSUS_FREE ? logistic(marks_only) : answer->probability;
    answer->low = answer->high = answer->probability;
    if (item->known == CONSENSUS_FREE) {
        double reach = Z_90 * sqrt(log_odds_variance(fit, g, shares));
        answer->low = fmin(logistic(answer->log_odds - reach), answer->probability);
        answer->high = fmax(logistic(answer->log_odds + reach), answer->probability);
    }
}

/* The share of dips among survey groups, with half a group either way. */
static double share_of_dips(const struct fit *fit)
{
    double dips = 0.5;
    for (size_t g = 0; g < fit->input->item_count; g++)
        dips += fit->input->items[g].control ? 0.0 : fit->groups[g].probability[FIT_DIP];
    return dips / (fit->sums.survey + 1.0);
}

bool fit_answers(struct fit *fit, struct consensus_output *output, struct base_error *error)
{
    struct share *shares = calloc(fit->input->people + 1, sizeof *shares);
    if (shares == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for the reviewers' skills.");
    fit_sums(fit);
    struct doubt doubt = growth_doubt(fit);
    fit->observed = true;
    fit_sums(fit);
    share_curves(fit, shares);
    share_variances(fit, shares, &doubt);
    double crowd = share_others(fit, shares);
    for (size_t j = 0; j < fit->input->people; j++) {
        skill_answer(fit, j, &shares[j], &doubt, crowd, &output->skills[j]);
        output->people[j] = fit->people[j];
    }
    output->prior = share_of_dips(fit);
    for (size_t g = 0; g < fit->input->item_count; g++)
        group_answer(fit, g, shares, output->prior, &output->answers[g]);
    output->common = fit->common;
    output->unmarked_dips = fit->sums.shown[FIT_DIP] - fit->sums.all[FIT_DIP];
    free(shares);
    return true;
}
