#include "ebbmark/dawid_skene.h"

#include <assert.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

/* The arrays of one fit. `labels` are sorted by item, so that sums run in a fixed order. */
struct fit {
    struct dawid_skene_label *labels;
    size_t n, items, people, classes, kinds;
    const struct dawid_skene_settings *settings;
    struct dawid_skene_output *out;
    double *pooled; /* classes x kinds: rates over all people, for the pseudo counts */
};

void dawid_skene_output_free(struct dawid_skene_output *output)
{
    free(output->class_probability);
    free(output->proportion);
    free(output->confusion);
    *output = (struct dawid_skene_output){0};
}

static int by_item(const void *a, const void *b)
{
    const struct dawid_skene_label *one = a, *other = b;
    if (one->item != other->item)
        return one->item < other->item ? -1 : 1;
    if (one->person != other->person)
        return one->person < other->person ? -1 : 1;
    return (one->label > other->label) - (one->label < other->label);
}

static bool in_range(const struct fit *fit, struct base_error *error)
{
    for (size_t i = 0; i < fit->n; i++) {
        const struct dawid_skene_label *label = &fit->labels[i];
        if (label->item < 0 || (size_t)label->item >= fit->items || label->person < 0 ||
            (size_t)label->person >= fit->people || label->label < 0 ||
            (size_t)label->label >= fit->kinds || label->count < 1)
            return base_fail(error, BASE_INVALID, "Label %zu is out of range.", i);
    }
    for (size_t i = 0; fit->settings->known != NULL && i < fit->items; i++)
        if (fit->settings->known[i] < -1 || fit->settings->known[i] >= (int32_t)fit->classes)
            return base_fail(error, BASE_INVALID, "The known class of item %zu is out of range.",
                             i);
    return true;
}

static void clamp_known(const struct fit *fit)
{
    for (size_t i = 0; fit->settings->known != NULL && i < fit->items; i++) {
        if (fit->settings->known[i] < 0)
            continue;
        double *p = fit->out->class_probability + i * fit->classes;
        for (size_t k = 0; k < fit->classes; k++)
            p[k] = (int32_t)k == fit->settings->known[i] ? 1.0 : 0.0;
    }
}

/* Class k from label k's share of the item's votes; items without votes are even. */
static void start_from_votes(const struct fit *fit)
{
    double *p = fit->out->class_probability;
    for (size_t i = 0; i < fit->n; i++)
        if ((size_t)fit->labels[i].label < fit->classes)
            p[(size_t)fit->labels[i].item * fit->classes + (size_t)fit->labels[i].label] +=
                fit->labels[i].count;
    for (size_t i = 0; i < fit->items; i++) {
        double sum = 0.0;
        for (size_t k = 0; k < fit->classes; k++)
            sum += p[i * fit->classes + k];
        for (size_t k = 0; k < fit->classes; k++)
            p[i * fit->classes + k] =
                sum > 0.0 ? p[i * fit->classes + k] / sum : 1.0 / (double)fit->classes;
    }
    clamp_known(fit);
}

/* Rows of `table` (kinds wide) to sums of 1; a row of nothing becomes even. */
static void rows_normalise(double *table, size_t rows, size_t kinds)
{
    for (size_t r = 0; r < rows; r++) {
        double sum = 0.0;
        for (size_t l = 0; l < kinds; l++)
            sum += table[r * kinds + l];
        for (size_t l = 0; l < kinds; l++)
            table[r * kinds + l] = sum > 0.0 ? table[r * kinds + l] / sum : 1.0 / (double)kinds;
    }
}

/* Class proportions and everyone's confusion from the class probabilities (M-step). */
static void estimate(const struct fit *fit)
{
    size_t classes = fit->classes, kinds = fit->kinds;
    struct dawid_skene_output *out = fit->out;
    memset(out->proportion, 0, classes * sizeof *out->proportion);
    memset(out->confusion, 0, fit->people * classes * kinds * sizeof *out->confusion);
    memset(fit->pooled, 0, classes * kinds * sizeof *fit->pooled);
    for (size_t i = 0; i < fit->items; i++)
        for (size_t k = 0; k < classes; k++)
            out->proportion[k] += out->class_probability[i * classes + k];
    rows_normalise(out->proportion, 1, classes);
    for (size_t i = 0; i < fit->n; i++) {
        const struct dawid_skene_label *label = &fit->labels[i];
        for (size_t k = 0; k < classes; k++) {
            double share = out->class_probability[(size_t)label->item * classes + k] * label->count;
            out->confusion[((size_t)label->person * classes + k) * kinds + (size_t)label->label] +=
                share;
            fit->pooled[k * kinds + (size_t)label->label] += share;
        }
    }
    if (fit->settings->pseudo_count > 0.0) {
        rows_normalise(fit->pooled, classes, kinds);
        for (size_t j = 0; j < fit->people; j++)
            for (size_t c = 0; c < classes * kinds; c++)
                out->confusion[j * classes * kinds + c] +=
                    fit->settings->pseudo_count * fit->pooled[c];
    }
    rows_normalise(out->confusion, fit->people * classes, kinds);
}

/* Class probabilities from the rates (E-step); the log-likelihood of the data as a by-product. */
static double classify(const struct fit *fit, double *logs)
{
    size_t classes = fit->classes, kinds = fit->kinds;
    struct dawid_skene_output *out = fit->out;
    double total = 0.0;
    size_t at = 0;
    for (size_t i = 0; i < fit->items; i++) {
        for (size_t k = 0; k < classes; k++)
            logs[k] = log(fmax(out->proportion[k], 1e-300));
        for (; at < fit->n && (size_t)fit->labels[at].item == i; at++) {
            const struct dawid_skene_label *label = &fit->labels[at];
            const double *rates = out->confusion + (size_t)label->person * classes * kinds;
            for (size_t k = 0; k < classes; k++)
                logs[k] +=
                    label->count * log(fmax(rates[k * kinds + (size_t)label->label], 1e-300));
        }
        int32_t known = fit->settings->known != NULL ? fit->settings->known[i] : -1;
        double most = -INFINITY, sum = 0.0;
        for (size_t k = 0; k < classes; k++)
            if (known < 0 || known == (int32_t)k)
                most = fmax(most, logs[k]);
        for (size_t k = 0; k < classes; k++) {
            double share = known < 0 || known == (int32_t)k ? exp(logs[k] - most) : 0.0;
            out->class_probability[i * classes + k] = share;
            sum += share;
        }
        for (size_t k = 0; k < classes; k++)
            out->class_probability[i * classes + k] /= sum;
        total += most + log(fmax(sum, 1e-300));
    }
    return total;
}

/* What the pseudo counts add: the log of their (unnormalised) Dirichlet density. */
static double penalty(const struct fit *fit)
{
    double sum = 0.0;
    if (fit->settings->pseudo_count <= 0.0)
        return 0.0;
    size_t cells = fit->classes * fit->kinds;
    for (size_t j = 0; j < fit->people; j++)
        for (size_t c = 0; c < cells; c++)
            sum += fit->settings->pseudo_count * fit->pooled[c] *
                   log(fmax(fit->out->confusion[j * cells + c], 1e-300));
    return sum;
}

static void iterate(struct fit *fit, double *logs)
{
    double before = -INFINITY;
    struct dawid_skene_output *out = fit->out;
    while (out->rounds < fit->settings->rounds_max && !out->converged) {
        estimate(fit);
        out->log_likelihood = classify(fit, logs);
        out->penalised = out->log_likelihood + penalty(fit);
        out->rounds++;
        out->converged = fabs(out->penalised - before) <=
                         fit->settings->tolerance * fmax(fabs(out->penalised), 1.0);
        before = out->penalised;
    }
}

bool dawid_skene_fit(const struct dawid_skene_label *labels, size_t n, size_t items, size_t people,
                     size_t classes, size_t label_kinds,
                     const struct dawid_skene_settings *settings, struct dawid_skene_output *output,
                     struct base_error *error)
{
    assert(classes >= 2 && label_kinds >= 2);
    *output = (struct dawid_skene_output){0};
    struct fit fit = {.n = n,
                      .items = items,
                      .people = people,
                      .classes = classes,
                      .kinds = label_kinds,
                      .settings = settings,
                      .out = output};
    fit.labels = malloc((n + 1) * sizeof *fit.labels);
    fit.pooled = calloc(classes * label_kinds, sizeof *fit.pooled);
    output->class_probability = calloc(items * classes + 1, sizeof(double));
    output->proportion = calloc(classes, sizeof(double));
    output->confusion = calloc(people * classes * label_kinds + 1, sizeof(double));
    double *logs = calloc(classes, sizeof *logs);
    bool ok = fit.labels != NULL && fit.pooled != NULL && output->class_probability != NULL &&
              output->proportion != NULL && output->confusion != NULL && logs != NULL;
    if (!ok)
        (void)base_fail(error, BASE_MEMORY, "There is no memory for the reviewers' rates.");
    if (ok && n > 0)
        memcpy(fit.labels, labels, n * sizeof *labels);
    ok = ok && in_range(&fit, error) &&
         (classes == label_kinds || settings->known != NULL ||
          base_fail(error, BASE_INVALID, "Known items are needed when classes are not labels."));
    if (ok) {
        qsort(fit.labels, n, sizeof *fit.labels, by_item);
        start_from_votes(&fit);
        iterate(&fit, logs);
    } else {
        dawid_skene_output_free(output);
    }
    free(logs);
    free(fit.pooled);
    free(fit.labels);
    return ok;
}
