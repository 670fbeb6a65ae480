#include <math.h>
#include <string.h>

#include "fit.h"

#define LOGIT_MOST 30.0                    /* beyond it a logit changes nothing */
#define LOG_ONE_MORE (-1.2039728043259361) /* of 0.3 */
#define LOG_NO_MORE (-0.35667494393873245)
#define SEEN_LEAST 0.05 /* a group stands for at most twenty like it */

/* Nodes and weights of the integral over a normal density, as published in every table. */
const union fit_nodes fit_node_u = {.at = {-3.7504397177257425, -2.366759410734541,
                                           -1.1544053947399682, 0.0, 1.1544053947399682,
                                           2.366759410734541, 3.7504397177257425, 0.0}};
const union fit_nodes fit_node_weight = {
    .at = {0.000548268855972217, 0.03075712396758652, 0.2401231786050127, 0.45714285714285724,
           0.2401231786050127, 0.03075712396758652, 0.000548268855972217, 0.0}};

/* The looks at one group in one class, at each node. */
struct side {
    union fit_nodes share;  /* of each node, given the looks; they add up to 1 */
    union fit_nodes unseen; /* given that nobody marked */
};

/* The inner loops are compiled twice, with and without wide registers; the machine picks. Each
 * operation is on each number by itself and none is fused, so the bits are the same. */
#if defined(__x86_64__) && defined(__GNUC__) && !defined(__clang__) &&                             \
    !defined(__SANITIZE_ADDRESS__)
#define WIDE __attribute__((flatten, target_clones("avx2", "default")))
#else
#define WIDE
#endif

#define BOTH(value) ((fit_pack){(value), (value), (value), (value)})
#define ACROSS(pack) (((pack)[0] + (pack)[1]) + ((pack)[2] + (pack)[3]))

static void take_logs(union fit_nodes *product, double *logs)
{
    for (int m = 0; m < FIT_NODES; m++) {
        logs[m] += log(product->at[m]);
        product->at[m] = 1.0;
    }
}

/* log of the weighted sum of e^logs; the shares of the nodes in it. */
static double weigh_nodes(const double *logs, union fit_nodes *share)
{
    double most = -INFINITY, sum = 0.0;
    for (int m = 0; m + 1 < FIT_NODES; m++)
        most = fmax(most, logs[m]);
    for (int m = 0; m < FIT_NODES; m++) {
        share->at[m] = m + 1 < FIT_NODES ? fit_node_weight.at[m] * exp(logs[m] - most) : 0.0;
        sum += share->at[m];
    }
    for (int m = 0; m < FIT_NODES; m++)
        share->at[m] /= sum;
    return most + log(sum);
}

/* The same from products that did not need logarithms; powers are E^r. */
static double weigh_products(const union fit_nodes *product, const union fit_nodes *powers,
                             union fit_nodes *share)
{
    fit_pack sum = BOTH(0.0);
#pragma GCC unroll 2
    for (int i = 0; i < FIT_PACKS; i++) {
        share->pack[i] = fit_node_weight.pack[i] * powers->pack[i] / product->pack[i];
        sum += share->pack[i];
    }
    double whole = ACROSS(sum);
#pragma GCC unroll 2
    for (int i = 0; i < FIT_PACKS; i++)
        share->pack[i] /= BOTH(whole);
    return log(whole);
}

/* Integrate the looks at group g over u. With t = e^-logit, P(marked) at a node is 1 / (1 + t E)
 * and P(not marked) t E / (1 + t E), where E = e^(-tau u) is the same for all groups of a round;
 * and t is a factor of the reviewer times one of the group, so that a look costs no exponential. */
static void side_sum(const struct fit *fit, size_t g, int side, struct side *out)
{
    const struct consensus_item *item = &fit->input->items[g];
    const struct consensus_look *looks = fit->input->looks + item->first_look;
    struct fit_pair *pairs = fit->pairs + item->first_look;
    struct fit_group *group = &fit->groups[g];
    double grown = fit_growth(&fit->common, side) * fit_x(fit, group, side);
    double shrunk = exp(-grown), shared[FIT_NODES] = {0.0}, sums[2] = {0.0, 0.0};
    size_t n = item->looks, marks = (size_t)group->marks;
    const union fit_nodes scale = fit->scale[side];
    union fit_nodes product;
#pragma GCC unroll 2
    for (int i = 0; i < FIT_PACKS; i++)
        product.pack[i] = BOTH(1.0);
    for (size_t k = 0; k < n; k++) {
        const struct fit_factor *factor = &fit->factors[looks[k].person];
        double logit = factor->logit[side] + grown, t = factor->odds[side] * shrunk;
        if (logit > LOGIT_MOST || logit < -LOGIT_MOST) {
            logit = logit > 0.0 ? LOGIT_MOST : -LOGIT_MOST;
            t = exp(-logit);
        }
        pairs[k].slope[side] = (float)t;
        sums[looks[k].marked != 0] += logit;
#pragma GCC unroll 2
        for (int i = 0; i < FIT_PACKS; i++)
            product.pack[i] *= BOTH(1.0) + BOTH(t) * scale.pack[i];
        if (k % FIT_POWERS == FIT_POWERS - 1 && n > FIT_POWERS)
            take_logs(&product, shared);
    }
    if (n <= FIT_POWERS) {
        const union fit_nodes *powers = fit->powers[side];
        group->log_side[side] = weigh_products(&product, &powers[n - marks], &out->share) - sums[0];
        group->unseen[side] =
            exp(weigh_products(&product, &powers[n], &out->unseen) - sums[0] - sums[1]);
    } else {
        take_logs(&product, shared);
        double tau = side == FIT_DIP ? fit->common.tau_dip : fit->common.tau_lure;
        double seen[FIT_NODES], unseen[FIT_NODES];
        for (int m = 0; m < FIT_NODES; m++) {
            double lift = tau * fit_node_u.at[m];
            seen[m] = -shared[m] - sums[0] - (double)(n - marks) * lift;
            unseen[m] = -shared[m] - sums[0] - sums[1] - (double)n * lift;
        }
        group->log_side[side] = weigh_nodes(seen, &out->share);
        group->unseen[side] = exp(weigh_nodes(unseen, &out->unseen));
    }
    group->unseen[side] = group->unseen[side] > 1.0 ? 1.0 : group->unseen[side];
}

static bool allows(const struct consensus_item *item, int class)
{
    return class == FIT_DIP ? item->known != CONSENSUS_NOT_DIP : item->known != CONSENSUS_DIP;
}

/* Marks that meet where nothing is because people marked together, by agreement or by copying: so
 * many marks, each further one less likely; each by one of the lookers in proportion to a weight.
 * Joint log-likelihood but for time and density; -INFINITY for fewer than two marks. */
static double log_together(const struct fit *fit, size_t g)
{
    const struct consensus_item *item = &fit->input->items[g];
    const struct consensus_look *looks = fit->input->looks + item->first_look;
    struct fit_group *group = &fit->groups[g];
    double marked = 0.0;
    group->company = 0.0;
    if (group->marks < 2.0)
        return -INFINITY;
    for (size_t k = 0; k < item->looks; k++) {
        const struct fit_factor *factor = &fit->factors[looks[k].person];
        group->company += factor->together;
        marked += looks[k].marked ? factor->log_together : 0.0;
    }
    return fit->logs.together + LOG_NO_MORE + (group->marks - 2.0) * LOG_ONE_MORE +
           group->log_orders + marked - group->marks * log(group->company);
}

/* Joint log-likelihoods of the classes. */
static void weigh_classes(const struct fit *fit, size_t g)
{
    const struct consensus_item *item = &fit->input->items[g];
    const struct consensus_look *looks = fit->input->looks + item->first_look;
    struct fit_group *group = &fit->groups[g];
    double time = fit_log_time(fit, group);
    group->log_class[FIT_DIP] = fit->logs.dips + group->log_side[FIT_DIP] + time;
    group->log_class[FIT_LURE] = fit->logs.lures + group->log_side[FIT_LURE] + time;
    group->log_alone = 0.0;
    for (size_t k = 0; k < item->looks; k++)
        if (looks[k].marked)
            group->log_alone += fit->people[looks[k].person].log_chance_per_d;
    group->log_together = log_together(fit, g) + time;
    group->together = 1.0 / (1.0 + exp(group->log_alone - group->log_together));
    group->log_class[FIT_NOTHING] = fit_log_sum(group->log_alone, group->log_together);
    for (int c = 0; c < FIT_CLASSES; c++)
        group->log_class[c] += group->sure * fit->logs.sure[c] +
                               (group->marks - group->sure) * fit->logs.unsure[c] +
                               fit_log_density(fit, group, c);
    if (group->complete) /* its SNR and its place were chosen, not met with */
        group->log_class[FIT_DIP] -= fit->logs.dips + fit_log_density(fit, group, FIT_DIP);
    for (int side = 0; side < FIT_SIDES && !group->complete; side++)
        group->log_class[side] -= log(fmax(1.0 - group->unseen[side], SEEN_LEAST));
}

/* Posteriors; the group's part of the objective. */
static double classify(const struct fit *fit, size_t g)
{
    const struct consensus_item *item = &fit->input->items[g];
    struct fit_group *group = &fit->groups[g];
    double most = -INFINITY, sum = 0.0;
    for (int c = 0; c < FIT_CLASSES; c++)
        if (allows(item, c))
            most = fmax(most, group->log_class[c]);
    for (int c = 0; c < FIT_CLASSES; c++) {
        group->probability[c] = allows(item, c) ? exp(group->log_class[c] - most) : 0.0;
        sum += group->probability[c];
    }
    for (int c = 0; c < FIT_CLASSES; c++)
        group->probability[c] /= sum;
    return most + log(sum);
}

/* Derivatives by each look's logit, by the growth and by tau. Real looks count with the group's
 * probability, and the groups like it that nobody marked with `like`: rows of zeros. */
static void side_derive(const struct fit *fit, size_t g, int side, const struct side *nodes,
                        double like, struct fit_sums *sums)
{
    const struct consensus_item *item = &fit->input->items[g];
    const struct consensus_look *looks = fit->input->looks + item->first_look;
    struct fit_pair *pairs = fit->pairs + item->first_look;
    const struct fit_group *group = &fit->groups[g];
    double p = group->probability[side], slope = 0.0, curve = 0.0;
    const union fit_nodes scale = fit->scale[side];
    union fit_nodes real, weight, marked, bent;
#pragma GCC unroll 2
    for (int i = 0; i < FIT_PACKS; i++) {
        real.pack[i] = BOTH(p) * nodes->share.pack[i];
        weight.pack[i] = real.pack[i] + BOTH(like) * nodes->unseen.pack[i];
        marked.pack[i] = bent.pack[i] = BOTH(0.0);
    }
    for (size_t k = 0; k < item->looks; k++) {
        fit_pack once = BOTH(0.0), twice = BOTH(0.0), t = BOTH((double)pairs[k].slope[side]);
        double y = looks[k].marked;
#pragma GCC unroll 2
        for (int i = 0; i < FIT_PACKS; i++) {
            fit_pack rate = BOTH(1.0) / (BOTH(1.0) + t * scale.pack[i]);
            fit_pack weighed = weight.pack[i] * rate;
            once += weighed;
            twice += weighed * rate;
            marked.pack[i] += rate;
            bent.pack[i] += rate - rate * rate;
        }
        double expected = ACROSS(once), squared = ACROSS(twice), variance = expected - squared;
        double gain = p * y - expected, bend = variance > 0.0 ? variance : 0.0;
        pairs[k].slope[side] = (float)gain;
        pairs[k].curve[side] = (float)bend;
        /* The variance of the slope over classes and nodes is taken off (Louis 1982, J. R. Stat.
         * Soc. B 44, 226). */
        double squares = squared + y * (p - 2.0 * expected);
        pairs[k].known[side] = (float)(variance - squares + gain * gain);
        slope += gain;
        curve += bend;
    }
    double x = fit_x(fit, group, side);
    sums->slope[side] += x * slope;
    sums->slope_curve[side] += x * x * curve;
    sums->all_curve[side] += curve;
    sums->curve_x[side] += x * curve;
    for (int m = 0; m < FIT_NODES; m++) {
        double u = fit_node_u.at[m];
        sums->tau[side] += u * (real.at[m] * group->marks - weight.at[m] * marked.at[m]);
        sums->tau_curve[side] += u * u * weight.at[m] * bent.at[m];
    }
}

/* The same for intervals. What it is not known whether the group is of this class, nor how hard it
 * is, takes the variance of the slope off the curvature (Louis 1982, J. R. Stat. Soc. B 44, 226).
 */
static void side_observe(const struct fit *fit, size_t g, int side, const struct side *nodes)
{
    const struct consensus_item *item = &fit->input->items[g];
    const struct consensus_look *looks = fit->input->looks + item->first_look;
    struct fit_pair *pairs = fit->pairs + item->first_look;
    double p = fit->groups[g].probability[side];
    for (size_t k = 0; k < item->looks; k++) {
        double mean = 0.0, squares = 0.0, curve = 0.0;
        for (int m = 0; m < FIT_NODES; m++) {
            double rate = 1.0 / (1.0 + (double)pairs[k].slope[side] * fit->scale[side].at[m]);
            double off = looks[k].marked - rate, share = nodes->share.at[m];
            mean += share * off;
            squares += share * off * off;
            curve += share * rate * (1.0 - rate);
        }
        pairs[k].slope[side] = (float)mean;
        pairs[k].curve[side] = (float)(p * curve - (p * squares - p * p * mean * mean));
    }
}

static void sum_common(const struct fit *fit, size_t g, struct fit_sums *sums)
{
    const struct consensus_item *item = &fit->input->items[g];
    const struct fit_group *group = &fit->groups[g];
    const double *p = group->probability;
    if (group->marks > 1.0) {
        double agreed = p[FIT_DIP] + p[FIT_LURE] + p[FIT_NOTHING] * group->together;
        sums->spread += agreed * group->spread;
        sums->centres += agreed * (group->marks - 1.0);
    }
    for (int c = 0; c < FIT_CLASSES; c++) {
        sums->sure[c] += p[c] * group->sure;
        sums->marks[c] += p[c] * group->marks;
        if (item->control)
            continue;
        sums->all[c] += p[c];
        if (c != FIT_NOTHING)
            sums->shown[c] += p[c] / fmax(1.0 - group->unseen[c], SEEN_LEAST);
        if (group->x == group->x) {
            double past;
            size_t knot = fit_knot(group->x, &past);
            const double *share = fit->common.x_share[c] + knot;
            double right = past * share[1] / ((1.0 - past) * share[0] + past * share[1]);
            sums->knots[c][knot] += p[c] * (1.0 - right);
            sums->knots[c][knot + 1] += p[c] * right;
            sums->count[c] += p[c];
            sums->x[c] += p[c] * group->x;
            sums->xx[c] += p[c] * group->x * group->x;
        }
    }
    sums->together += item->control ? 0.0 : p[FIT_NOTHING] * group->together;
    sums->survey += item->control ? 0.0 : 1.0;
}

static void group_sum(struct fit *fit, size_t g, struct fit_sums *sums)
{
    const struct consensus_item *item = &fit->input->items[g];
    struct fit_group *group = &fit->groups[g];
    struct fit_pair *pairs = fit->pairs + item->first_look;
    struct side nodes[FIT_SIDES];
    for (int side = 0; side < FIT_SIDES; side++)
        side_sum(fit, g, side, &nodes[side]);
    weigh_classes(fit, g);
    sums->objective += classify(fit, g);
    double together = group->probability[FIT_NOTHING] * group->together;
    double alone = group->probability[FIT_NOTHING] - together;
    double invited = group->marks < 2.0 ? 0.0 : together * group->marks / group->company;
    for (size_t k = 0; k < item->looks; k++) {
        bool marked = fit->input->looks[item->first_look + k].marked;
        pairs[k].alone = marked ? (float)alone : 0.0f;
        pairs[k].together = marked ? (float)together : 0.0f;
        pairs[k].invited = (float)invited;
    }
    for (int side = 0; side < FIT_SIDES; side++) {
        double unseen = group->unseen[side];
        double like = group->complete || unseen > 1.0 - SEEN_LEAST
                          ? 0.0
                          : group->probability[side] * unseen / (1.0 - unseen);
        if (fit->observed)
            side_observe(fit, g, side, &nodes[side]);
        else
            side_derive(fit, g, side, &nodes[side], like, sums);
    }
    sum_common(fit, g, sums);
}

WIDE static void block_sum(void *context, size_t b)
{
    struct fit *fit = context;
    struct fit_sums *sums = &fit->block_sums[b];
    memset(sums, 0, sizeof *sums);
    for (size_t i = 0; i < fit->blocks[b].count; i++)
        group_sum(fit, fit->blocks[b].first + i, sums);
}

static void block_factors(void *context, size_t b)
{
    struct fit *fit = context;
    for (size_t j = b * FIT_PEOPLE_A_BLOCK;
         j < (b + 1) * FIT_PEOPLE_A_BLOCK && j < fit->input->people; j++) {
        const struct consensus_person *person = &fit->people[j];
        struct fit_factor *factor = &fit->factors[j];
        factor->logit[FIT_DIP] = person->hit_logit;
        factor->logit[FIT_LURE] = person->lure_logit;
        factor->odds[FIT_DIP] = exp(-person->hit_logit);
        factor->odds[FIT_LURE] = exp(-person->lure_logit);
        factor->log_together = person->log_together;
        factor->together = exp(person->log_together);
    }
}

static void set_logs(struct fit *fit)
{
    const struct consensus_common *common = &fit->common;
    fit->logs.dips = log(common->dips_per_d);
    fit->logs.lures = log(common->lures_per_d);
    fit->logs.together = log(common->together_per_d);
    fit->logs.kappa = log(common->kappa);
    for (int c = 0; c < FIT_CLASSES; c++) {
        fit->logs.sure[c] = log(common->sure[c]);
        fit->logs.unsure[c] = log1p(-common->sure[c]);
    }
}

/* E of each node and its powers. */
static void set_scales(struct fit *fit)
{
    const double tau[FIT_SIDES] = {fit->common.tau_dip, fit->common.tau_lure};
    for (int side = 0; side < FIT_SIDES; side++)
        for (int m = 0; m < FIT_NODES; m++) {
            double lift = -tau[side] * fit_node_u.at[m];
            fit->scale[side].at[m] = exp(lift);
            for (int r = 0; r <= FIT_POWERS; r++)
                fit->powers[side][r].at[m] = exp(lift * r);
        }
}

void fit_sums(struct fit *fit)
{
    set_logs(fit);
    set_scales(fit);
    base_pool_for(fit->settings->pool, fit->people_block_count, block_factors, fit);
    base_pool_for(fit->settings->pool, fit->block_count, block_sum, fit);
    memset(&fit->sums, 0, sizeof fit->sums);
    double *total = (double *)&fit->sums;
    for (size_t b = 0; b < fit->block_count; b++) {
        const double *one = (const double *)&fit->block_sums[b];
        for (size_t i = 0; i < sizeof fit->sums / sizeof *total; i++)
            total[i] += one[i];
    }
}
