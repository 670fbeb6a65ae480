/*
 * Plain Dawid & Skene on labels from standard input, for tests/reference/dawid_skene.py. First
 * line: items people classes kinds. Then one line a label: item person label count. Prints the
 * log-likelihood, the rounds, whether it converged, then proportions, class probabilities (a line
 * an item) and rates (a line a person and class).
 */
#include <stdio.h>
#include <stdlib.h>

#include "ebbmark/dawid_skene.h"

static void print_rows(const double *values, size_t rows, size_t columns)
{
    for (size_t r = 0; r < rows; r++)
        for (size_t c = 0; c < columns; c++)
            printf("%.17g%c", values[r * columns + c], c + 1 < columns ? ' ' : '\n');
}

static bool read_labels(struct dawid_skene_label **labels, size_t *n)
{
    size_t room = 0;
    struct dawid_skene_label row;
    while (scanf("%d %d %d %d", &row.item, &row.person, &row.label, &row.count) == 4) {
        if (*n == room) {
            room = room > 0 ? 2 * room : 256;
            struct dawid_skene_label *grown = realloc(*labels, room * sizeof *grown);
            if (grown == NULL)
                return false;
            *labels = grown;
        }
        (*labels)[(*n)++] = row;
    }
    return true;
}

int main(void)
{
    size_t items, people, classes, kinds, n = 0;
    struct dawid_skene_label *labels = NULL;
    if (scanf("%zu %zu %zu %zu", &items, &people, &classes, &kinds) != 4 ||
        !read_labels(&labels, &n)) {
        fputs("The labels could not be read.\n", stderr);
        free(labels);
        return 1;
    }
    struct dawid_skene_settings settings = DAWID_SKENE_DEFAULT;
    settings.rounds_max = 20000;
    settings.tolerance = 1e-13;
    struct dawid_skene_output out;
    struct base_error error = {0};
    bool ok = dawid_skene_fit(labels, n, items, people, classes, kinds, &settings, &out, &error);
    if (ok) {
        printf("%.17g %u %d\n", out.log_likelihood, out.rounds, out.converged);
        print_rows(out.proportion, 1, classes);
        print_rows(out.class_probability, items, classes);
        print_rows(out.confusion, people * classes, kinds);
        dawid_skene_output_free(&out);
    } else {
        fprintf(stderr, "%s\n", error.sentence);
    }
    free(labels);
    return ok ? 0 : 1;
}
