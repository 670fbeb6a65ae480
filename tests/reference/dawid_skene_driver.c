/* Reads `items people classes` and then `item person label` lines from standard input, fits plain
 * Dawid & Skene, and prints the result as JSON. */
#include <stdio.h>
#include <stdlib.h>

#include "ebbmark/dawid_skene.h"

static void print_list(const char *name, const double *values, size_t n, const char *after)
{
    (void)printf("\"%s\": [", name);
    for (size_t i = 0; i < n; i++)
        (void)printf("%s%.17g", i > 0 ? ", " : "", values[i]);
    (void)printf("]%s", after);
}

int main(void)
{
    size_t items, people, classes, n = 0, room = 1024;
    struct dawid_skene_label *labels = malloc(room * sizeof *labels);
    if (labels == NULL || scanf("%zu %zu %zu", &items, &people, &classes) != 3)
        return 2;
    for (int item, person, label; scanf("%d %d %d", &item, &person, &label) == 3; n++) {
        if (n == room) {
            struct dawid_skene_label *more = realloc(labels, (room *= 2) * sizeof *labels);
            if (more == NULL)
                return 2;
            labels = more;
        }
        labels[n] = (struct dawid_skene_label){item, person, label, 1};
    }
    struct dawid_skene_settings settings = DAWID_SKENE_DEFAULT;
    settings.tolerance = 1e-13;
    settings.rounds_max = 5000;
    struct dawid_skene_output out;
    struct base_error error = {0};
    if (!dawid_skene_fit(labels, n, items, people, classes, classes, &settings, &out, &error)) {
        (void)fprintf(stderr, "%s\n", error.sentence);
        return 1;
    }
    (void)printf("{\"log_likelihood\": %.12g, \"converged\": %d, ", out.log_likelihood,
                 out.converged);
    print_list("proportion", out.proportion, classes, ", ");
    print_list("confusion", out.confusion, people * classes * classes, ", ");
    print_list("class_probability", out.class_probability, items * classes, "}\n");
    dawid_skene_output_free(&out);
    free(labels);
    return 0;
}
