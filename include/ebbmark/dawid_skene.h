/*
 * Plain Dawid & Skene (1979, Applied Statistics 28, 20-28): K classes, L labels, repeated labels
 * per reviewer allowed. EM from vote fractions. Pure, deterministic.
 */
#ifndef EBBMARK_DAWID_SKENE_H
#define EBBMARK_DAWID_SKENE_H

#include <stddef.h>
#include <stdint.h>

#include "ebbmark/error.h"

struct dawid_skene_label {
    int32_t item, person;
    int32_t label; /* 0 … labels-1 */
    int32_t count; /* how often this person gave it to this item, >= 1 */
};

struct dawid_skene_settings {
    unsigned rounds_max;  /* default 500 */
    double tolerance;     /* relative change of the penalised log-likelihood, default 1e-8 */
    double pseudo_count;  /* added to every confusion cell in proportion to the pooled rates;
                             0 is the published maximum-likelihood form */
    const int32_t *known; /* items values: class, or -1 where free; NULL: all free */
};
#define DAWID_SKENE_DEFAULT ((struct dawid_skene_settings){500, 1e-8, 0.0, NULL})

struct dawid_skene_output {
    double *class_probability; /* items x classes */
    double *proportion;        /* classes */
    double *confusion;         /* people x classes x labels: P(label | class, person) */
    double log_likelihood;     /* of the data at the end, without the penalty */
    double penalised;          /* with it; equal when pseudo_count is 0 */
    unsigned rounds;
    int converged;
};
void dawid_skene_output_free(struct dawid_skene_output *output);

/* labels holds n rows, in any order. Classes and labels >= 2. When labels == classes, class k
 * starts from label k's vote fraction; otherwise the caller must give known items. BASE_INVALID
 * for an index out of range, BASE_MEMORY. */
bool dawid_skene_fit(const struct dawid_skene_label *labels, size_t n, size_t items, size_t people,
                     size_t classes, size_t label_kinds,
                     const struct dawid_skene_settings *settings, struct dawid_skene_output *output,
                     struct base_error *error);

#endif
