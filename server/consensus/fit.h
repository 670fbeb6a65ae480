/*
 * The inside of a three-class fit: its arrays and its steps. Private to the room.
 *
 * One round: sums over all groups under the present numbers (fit_sums: the E-step, with the first
 * and second derivatives that the M-step needs), then new numbers (fit_step). Groups and reviewers
 * are worked on in blocks of a fixed size whose sums are added in order, so that the bits do not
 * depend on the number of threads.
 */
#ifndef CONSENSUS_FIT_H
#define CONSENSUS_FIT_H

#include <math.h>

#include "ebbmark/consensus_model.h"

enum { FIT_DIP, FIT_LURE, FIT_NOTHING, FIT_CLASSES };
#define FIT_BETA_SD 2.0 /* of the priors of beta and gamma */
#define FIT_GAMMA_SD 0.5
#define FIT_TAU_LEAST 0.05
#define FIT_TAU_MOST 3.0
#define FIT_SIDES 2 /* the classes in which somebody was shown something: dip, lure */

/* Gauss-Hermite nodes, seven and one of no weight, so that they go in fours. */
#define FIT_NODES 8
/* So many factors of at most 1 + e^(30 + 3 x 3.75), the largest that a look can give, stay below
 * 1e308. */
#define FIT_POWERS 16
typedef double fit_pack __attribute__((vector_size(32)));
#define FIT_PACKS (FIT_NODES / 4)
union fit_nodes {
    double at[FIT_NODES];
    fit_pack pack[FIT_PACKS];
};

/* One look: what it says of its reviewer in each class. */
struct fit_pair {
    float slope[FIT_SIDES]; /* d of the expected log-likelihood by the logit; while a group is
                                summed, e^-logit stands here */
    float curve[FIT_SIDES]; /* minus the second derivative, >= 0 */
    float known[FIT_SIDES]; /* the curve, less what it is not known whether the group is of the
                                class, nor how hard it is */
    float alone;            /* P(nothing, by chance) where marked */
    float together;         /* P(nothing, marked together) where marked */
    float invited;          /* marks made together, over the weight of all lookers */
};

/* One group, beside the caller's item. */
struct fit_group {
    double x;        /* ln(max(SNR, 1) / 10), NAN where unknown */
    double marks;    /* how many */
    double sure;     /* how many of them */
    double spread;   /* sum of squares of the centres about their mean, in durations squared */
    double log_time; /* the part of log S that does not depend on kappa */
    bool complete;   /* an injected dip: it is here whether it was marked or not */
    double log_side[FIT_SIDES];      /* log of the integral over u of the looks */
    double unseen[FIT_SIDES];        /* P(no mark at all | class) */
    double log_alone, log_together;  /* the two ways of being nothing, see fit_sums.c */
    double together;                 /* P(together | nothing) */
    double log_orders;               /* log of k! for k marks */
    double company;                  /* sum of the lookers' weights in marking together */
    double log_class[FIT_CLASSES];   /* joint log-likelihoods; -INFINITY where ruled out */
    double probability[FIT_CLASSES]; /* posterior */
};

/* Sums over groups that the common numbers are made of. */
struct fit_sums {
    double objective;                                                      /* without the priors */
    double slope[FIT_SIDES], slope_curve[FIT_SIDES];                       /* by beta, gamma */
    double all_curve[FIT_SIDES], curve_x[FIT_SIDES], all_known[FIT_SIDES]; /* by all logits alike */
    double tau[FIT_SIDES], tau_curve[FIT_SIDES];
    double spread, centres; /* for kappa */
    double sure[FIT_CLASSES], marks[FIT_CLASSES];
    double count[FIT_CLASSES], x[FIT_CLASSES], xx[FIT_CLASSES]; /* survey groups with an SNR */
    double knots[FIT_CLASSES][CONSENSUS_X_KNOTS];
    double all[FIT_CLASSES]; /* survey groups */
    double shown[FIT_SIDES]; /* the same, and those like them that nobody marked */
    double together;         /* survey groups marked together */
    double survey;           /* number of survey groups */
};

/* Sums over reviewers. */
struct fit_people_sums {
    double lean_slope[FIT_SIDES], lean_curve[FIT_SIDES]; /* by logits that follow the growth */
    double prior;                                        /* log of the priors */
    double deviation[FIT_SIDES], square[FIT_SIDES], known[FIT_SIDES],
        firm[FIT_SIDES]; /* for means and spreads */
    double chance_mean;  /* sum of expected chance rates */
    double chance_days;  /* sum of chance rate x days */
};

#define FIT_AHEAD 16 /* looks to fetch ahead */
#define FIT_PEOPLE_A_BLOCK 1024
/* One reviewer's numbers as a round uses them. */
struct fit_factor {
    double logit[FIT_SIDES], odds[FIT_SIDES]; /* odds: e^-logit */
    double log_together, together;
};
/* How far each logit of a reviewer follows the looks rather than the population, in [0, 1]. */
struct fit_lean {
    double of[FIT_SIDES];
};
struct fit_block {
    size_t first, count;
};

/* Logarithms of what is common, taken once a round. */
struct fit_logs {
    double dips, lures, together, kappa, sure[FIT_CLASSES], unsure[FIT_CLASSES];
};
struct fit {
    union fit_nodes scale[FIT_SIDES];                  /* E = e^(-tau u) */
    union fit_nodes powers[FIT_SIDES][FIT_POWERS + 1]; /* its powers */
    const struct consensus_input *input;
    const struct consensus_settings *settings;
    struct consensus_common common;
    struct consensus_person *people;
    struct consensus_person *people_before, *people_next; /* for stepping back */
    struct consensus_common common_before, common_next;
    struct fit_lean *leans;     /* people */
    struct fit_factor *factors; /* people */
    struct fit_group *groups;
    struct fit_pair *pairs;
    size_t *first_of_person, *of_person; /* the looks of each person, in order */
    struct fit_block *blocks;
    size_t block_count, people_block_count;
    struct fit_sums *block_sums;
    struct fit_people_sums *people_sums;
    struct fit_sums sums;
    struct fit_people_sums people_sum;
    struct fit_logs logs;
    bool still;    /* the logits stay, in the population's step */
    bool observed; /* for intervals: slopes and curves are of the observed likelihood, see below */
};

/* While `observed`, a pair's slope is the derivative of the class's own log-likelihood, and its
 * curve minus the second derivative of the mixture's, which may be negative for one look. */

extern const union fit_nodes fit_node_u, fit_node_weight;

/* Sum over all groups under the present numbers: posteriors, derivatives, objective. */
void fit_sums(struct fit *fit);

/* From the sums to people_next and common_next: one Newton step of the logits and of what all
 * groups share; the population stays. */
void fit_step(struct fit *fit);

/* The population's step; all else stays. The two do not move at once, because each would answer to
 * where the other was, and they could go round in a circle. */
void fit_step_population(struct fit *fit);

/* log of the priors at the present numbers. */
double fit_prior(struct fit *fit);

/* Where a fit starts when nothing was seen; the rates are left to the caller. */
struct consensus_common fit_common_start(void);

/* Answers and skills at the present numbers; sums once more. BASE_MEMORY. */
bool fit_answers(struct fit *fit, struct consensus_output *output, struct base_error *error);

/* x of a group for a class, or the class's mean where nothing was measured. */
static inline double fit_x(const struct fit *fit, const struct fit_group *group, int side)
{
    return group->x == group->x ? group->x : fit->common.x_mean[side];
}

static inline double fit_log_sum(double a, double b)
{
    double most = fmax(a, b);
    return most == -INFINITY ? most : most + log(exp(a - most) + exp(b - most));
}

/* Knots of the density of x. Where x lies among the knots: at `at`, `past` of the way to the next.
 */
static inline size_t fit_knot(double x, double *past)
{
    double at = (x - CONSENSUS_X_FIRST) / CONSENSUS_X_STEP;
    at = fmin(fmax(at, 0.0), CONSENSUS_X_KNOTS - 1.000001);
    *past = at - floor(at);
    return (size_t)at;
}

static inline double fit_log_density(const struct fit *fit, const struct fit_group *group,
                                     int class)
{
    if (group->x != group->x)
        return 0.0;
    double past;
    size_t knot = fit_knot(group->x, &past);
    const double *share = fit->common.x_share[class];
    return log(((1.0 - past) * share[knot] + past * share[knot + 1]) / CONSENSUS_X_STEP);
}

/* log S: how well the centres of the marks agree in time. */
static inline double fit_log_time(const struct fit *fit, const struct fit_group *group)
{
    double kappa = fit->common.kappa;
    if (group->marks == 0.0)
        return 0.0;
    return group->log_time - (group->marks - 1.0) * fit->logs.kappa -
           0.5 * group->spread / (kappa * kappa);
}

static inline double fit_growth(const struct consensus_common *common, int side)
{
    return side == FIT_DIP ? common->beta : common->gamma;
}

#endif
