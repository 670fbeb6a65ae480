#include <math.h>
#include <string.h>

#include "fit.h"

/* What is expected before anything is seen, and how many reviewers, groups or marks it weighs. They
 * only matter in small campaigns, where they tell a dip from a lure: dips are marked by more. */
#define HIT_MEAN 0.5
#define LURE_MEAN (-1.0)
#define MEAN_SD 1.5
#define SPREAD 0.8
#define SPREAD_WEIGHT 4.0
#define BETA 2.0
#define GAMMA 0.0
#define TAU 0.5
#define TAU_SD 0.5
#define KAPPA 0.25
#define KAPPA_WEIGHT 4.0
#define SURE 0.5
#define SURE_WEIGHT 4.0
#define X_WEIGHT 4.0
#define X_SD_LEAST 0.2
#define X_NORMAL_WEIGHT 80.0 /* groups that hold the density of x to a normal one */
#define X_SHARE_LEAST 1e-6
#define RATE_WEIGHT 0.5
#define TOGETHER_WEIGHT 0.1
#define FIRM_LEAST 0.5  /* of the reviewers holds the population's mean back */
#define KNOWN_LEAST 0.3 /* of the curvature is taken for known at least */
#define STEP_MOST 1.5   /* of a logit, a round */
static const double x_mean[FIT_CLASSES] = {0.0, -0.5, -1.9};
static const double x_sd[FIT_CLASSES] = {0.7, 0.6, 0.3};

/* The shares of the knots in a normal density. */
static void knots_normal(double mean, double sd, double *out)
{
    double sum = 0.0;
    for (int k = 0; k < CONSENSUS_X_KNOTS; k++) {
        double z = (CONSENSUS_X_FIRST + CONSENSUS_X_STEP * k - mean) / sd;
        out[k] = exp(-0.5 * z * z) + X_SHARE_LEAST;
        sum += out[k];
    }
    for (int k = 0; k < CONSENSUS_X_KNOTS; k++)
        out[k] /= sum;
}

struct consensus_common fit_common_start(void)
{
    struct consensus_common common = {.beta = BETA,
                                      .gamma = 0.3,
                                      .tau_dip = 0.7,
                                      .tau_lure = 0.7,
                                      .kappa = KAPPA,
                                      .hit_mean = HIT_MEAN,
                                      .hit_sd = SPREAD,
                                      .lure_mean = LURE_MEAN,
                                      .lure_sd = SPREAD,
                                      .x_mean = {x_mean[0], x_mean[1], x_mean[2]},
                                      .x_sd = {x_sd[0], x_sd[1], x_sd[2]},
                                      .sure = {SURE, SURE, SURE}};
    for (int c = 0; c < FIT_CLASSES; c++)
        knots_normal(x_mean[c], x_sd[c], common.x_share[c]);
    return common;
}

static double limited(double value, double most)
{
    return value > most ? most : value < -most ? -most : value;
}

static double square(double value)
{
    return value * value;
}

/* A reviewer's part of the prior. */
static double person_prior(const struct fit *fit, const struct consensus_person *person, size_t j)
{
    const struct consensus_common *common = &fit->common;
    double rate = exp(person->log_chance_per_d);
    return -0.5 * square((person->hit_logit - common->hit_mean) / common->hit_sd) -
           0.5 * square((person->lure_logit - common->lure_mean) / common->lure_sd) +
           person->log_together - exp(person->log_together) + person->log_chance_per_d -
           rate / common->chance_per_d - rate * fmax(fit->input->days_looked[j], 0.0);
}

static void block_prior(void *context, size_t b)
{
    struct fit *fit = context;
    struct fit_people_sums *sums = &fit->people_sums[b];
    memset(sums, 0, sizeof *sums);
    for (size_t j = b * FIT_PEOPLE_A_BLOCK;
         j < (b + 1) * FIT_PEOPLE_A_BLOCK && j < fit->input->people; j++)
        sums->prior += person_prior(fit, &fit->people[j], j);
}

static void add_blocks(struct fit *fit)
{
    memset(&fit->people_sum, 0, sizeof fit->people_sum);
    double *total = (double *)&fit->people_sum;
    for (size_t b = 0; b < fit->people_block_count; b++) {
        const double *one = (const double *)&fit->people_sums[b];
        for (size_t i = 0; i < sizeof fit->people_sum / sizeof *total; i++)
            total[i] += one[i];
    }
}

double fit_prior(struct fit *fit)
{
    const struct consensus_common *common = &fit->common;
    base_pool_for(fit->settings->pool, fit->people_block_count, block_prior, fit);
    add_blocks(fit);
    double n = (double)fit->input->people, days = fmax(fit->input->days_total, 1.0);
    return fit->people_sum.prior - n * log(common->hit_sd * common->lure_sd) -
           0.5 * square((common->beta - BETA) / FIT_BETA_SD) -
           0.5 * square((common->gamma - GAMMA) / FIT_GAMMA_SD) -
           0.5 * square((common->tau_dip - TAU) / TAU_SD) -
           0.5 * square((common->tau_lure - TAU) / TAU_SD) -
           (common->dips_per_d + common->lures_per_d + common->together_per_d) * days -
           KAPPA_WEIGHT * (log(common->kappa) + 0.5 * square(KAPPA / common->kappa));
}

/* One reviewer's Newton step, and their part in the population's mean and spread. */
static void person_step(struct fit *fit, size_t j, struct fit_people_sums *sums)
{
    const struct consensus_common *common = &fit->common;
    struct consensus_person *next = &fit->people_next[j];
    double slope[FIT_SIDES] = {0.0, 0.0}, curve[FIT_SIDES] = {0.0, 0.0};
    double known[FIT_SIDES] = {0.0, 0.0}, chance = 0.0;
    double together = 1.0, invited = 1.0;
    for (size_t k = fit->first_of_person[j]; k < fit->first_of_person[j + 1]; k++) {
        /* A reviewer's looks lie all over the memory; of_person has FIT_AHEAD entries to spare. */
        __builtin_prefetch(&fit->pairs[fit->of_person[k + FIT_AHEAD]]);
        const struct fit_pair *pair = &fit->pairs[fit->of_person[k]];
        for (int side = 0; side < FIT_SIDES; side++) {
            slope[side] += (double)pair->slope[side];
            curve[side] += (double)pair->curve[side];
            known[side] += (double)pair->known[side];
        }
        chance += (double)pair->alone;
        together += (double)pair->together;
        invited += (double)pair->invited;
    }
    const double mean[FIT_SIDES] = {common->hit_mean, common->lure_mean};
    const double spread[FIT_SIDES] = {common->hit_sd, common->lure_sd};
    for (int side = 0; side < FIT_SIDES; side++) {
        double *logit = side == FIT_DIP ? &next->hit_logit : &next->lure_logit;
        double at = side == FIT_DIP ? fit->people[j].hit_logit : fit->people[j].lure_logit;
        double pull = 1.0 / square(spread[side]);
        double all = curve[side] + pull, up = slope[side] - (at - mean[side]) * pull;
        double lean = curve[side] / all;
        *logit = fit->still ? at : at + limited(up / all, STEP_MOST);
        fit->leans[j].of[side] = lean;
        sums->lean_slope[side] += lean * up;
        sums->lean_curve[side] += lean * curve[side];
        sums->firm[side] += lean;
        sums->deviation[side] += *logit - mean[side];
        sums->square[side] += square(*logit - mean[side]);
        known[side] = fmax(known[side], KNOWN_LEAST * curve[side]);
        sums->known[side] += known[side] / (known[side] + pull);
    }
    double days = fmax(fit->input->days_looked[j], 0.0);
    double rate = (chance + 1.0) / (days + 1.0 / common->chance_per_d);
    next->log_chance_per_d = fit->still ? fit->people[j].log_chance_per_d : log(rate);
    next->log_together = fit->still ? fit->people[j].log_together : log(together / invited);
    sums->chance_mean += rate;
}

static void block_step(void *context, size_t b)
{
    struct fit *fit = context;
    struct fit_people_sums *sums = &fit->people_sums[b];
    memset(sums, 0, sizeof *sums);
    for (size_t j = b * FIT_PEOPLE_A_BLOCK;
         j < (b + 1) * FIT_PEOPLE_A_BLOCK && j < fit->input->people; j++)
        person_step(fit, j, sums);
}

/* Mean and spread of a logit over the reviewers: where the estimates' spread and their own variance
 * together leave them unchanged (Laplace EM), reached in longer steps than EM's own: those who
 * were hardly seen do not hold it back. */
static void population_step(const struct fit_people_sums *sums, int side, double n, double expected,
                            double *mean, double *spread)
{
    double variance = square(*spread);
    double step = (sums->deviation[side] / variance + (expected - *mean) / square(MEAN_SD)) /
                  (fmax(sums->firm[side], FIRM_LEAST * n) / variance + 1.0 / square(MEAN_SD));
    double whole =
        (sums->square[side] + SPREAD_WEIGHT * square(SPREAD)) / (sums->known[side] + SPREAD_WEIGHT);
    /* Half the way: the logits follow in the next rounds, and what is known of them changes. */
    *spread = sqrt(0.5 * (variance + fmin(whole, 4.0 * variance)));
    *mean += limited(step, STEP_MOST);
}

/* Mean and spread of x in each class, and its density: a mixture of triangles at the knots, held
 * to the normal density of that mean and spread by so many groups. */
static void densities_step(const struct fit_sums *sums, struct consensus_common *next)
{
    for (int c = 0; c < FIT_CLASSES; c++) {
        double n = sums->count[c] + X_WEIGHT;
        double mean = (sums->x[c] + X_WEIGHT * x_mean[c]) / n;
        double second = (sums->xx[c] + X_WEIGHT * (square(x_sd[c]) + square(x_mean[c]))) / n;
        next->x_mean[c] = mean;
        next->x_sd[c] = sqrt(fmax(second - square(mean), square(X_SD_LEAST)));
        double expected[CONSENSUS_X_KNOTS];
        knots_normal(mean, next->x_sd[c], expected);
        for (int k = 0; k < CONSENSUS_X_KNOTS; k++)
            next->x_share[c][k] = (sums->knots[c][k] + X_NORMAL_WEIGHT * expected[k]) /
                                  (sums->count[c] + X_NORMAL_WEIGHT);
        next->sure[c] = (sums->sure[c] + SURE_WEIGHT * SURE) / (sums->marks[c] + SURE_WEIGHT);
    }
}

static void population_all_step(const struct fit *fit, struct consensus_common *next)
{
    const struct fit_people_sums *people = &fit->people_sum;
    double days = fmax(fit->input->days_total, 1.0), n = (double)fit->input->people;
    population_step(people, FIT_DIP, n, HIT_MEAN, &next->hit_mean, &next->hit_sd);
    population_step(people, FIT_LURE, n, LURE_MEAN, &next->lure_mean, &next->lure_sd);
    next->dips_per_d = (fit->sums.all[FIT_DIP] + RATE_WEIGHT) / days;
    next->lures_per_d = (fit->sums.all[FIT_LURE] + RATE_WEIGHT) / days;
    next->together_per_d = (fit->sums.together + TOGETHER_WEIGHT) / days;
    next->chance_per_d = (people->chance_mean + next->chance_per_d) / (n + 1.0);
    densities_step(&fit->sums, next);
}

/* Newton step of beta or gamma together with the logits, which hang together: counted from where
 * the most is known of x, each logit gives way as far as it follows the looks. (The exact step
 * would have such a middle for each reviewer.) */
static void growth_step(struct fit *fit, int side, double expected, double sd, double *growth)
{
    const struct fit_sums *sums = &fit->sums;
    double pull = 1.0 / square(sd);
    double middle = sums->curve_x[side] / (sums->all_curve[side] + 1e-9);
    double slope =
        sums->slope[side] - middle * fit->people_sum.lean_slope[side] - (*growth - expected) * pull;
    double curve = sums->slope_curve[side] - square(middle) * fit->people_sum.lean_curve[side];
    double step = limited(slope / (fmax(curve, 0.0) + pull), STEP_MOST);
    *growth += step;
    for (size_t j = 0; j < fit->input->people; j++) {
        struct consensus_person *next = &fit->people_next[j];
        *(side == FIT_DIP ? &next->hit_logit : &next->lure_logit) -=
            middle * step * fit->leans[j].of[side];
    }
}

static void step_people(struct fit *fit)
{
    base_pool_for(fit->settings->pool, fit->people_block_count, block_step, fit);
    add_blocks(fit);
}

void fit_step(struct fit *fit)
{
    const struct fit_sums *sums = &fit->sums;
    struct consensus_common *next = &fit->common_next;
    *next = fit->common;
    fit->still = false;
    step_people(fit);
    growth_step(fit, FIT_DIP, BETA, FIT_BETA_SD, &next->beta);
    growth_step(fit, FIT_LURE, GAMMA, FIT_GAMMA_SD, &next->gamma);
    double *tau[FIT_SIDES] = {&next->tau_dip, &next->tau_lure};
    for (int side = 0; side < FIT_SIDES; side++) {
        double pull = 1.0 / square(TAU_SD);
        *tau[side] += limited(
            (sums->tau[side] - (*tau[side] - TAU) * pull) / (sums->tau_curve[side] + pull), 0.5);
        *tau[side] = fmin(fmax(*tau[side], FIT_TAU_LEAST), FIT_TAU_MOST);
    }
    next->kappa =
        sqrt((sums->spread + KAPPA_WEIGHT * square(KAPPA)) / (sums->centres + KAPPA_WEIGHT));
}

void fit_step_population(struct fit *fit)
{
    fit->common_next = fit->common;
    fit->still = true;
    step_people(fit);
    population_all_step(fit, &fit->common_next);
}
