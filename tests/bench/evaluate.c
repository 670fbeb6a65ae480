/*
 * How good the consensus is, on simulated campaigns: vote fractions, the plain two-class form and
 * the model side by side, for three mixes of reviewers, 4, 8 and 15 looks a segment and several
 * seeds. Prints its table and writes it to the file named by the first argument.
 *
 *     evaluate [FILE [SEEDS]]
 */
#include <stdarg.h>
#include <stdio.h>

#include "../unit/consensus/simulation.h"

#define BINS 10

struct measures {
    double average_precision, found, log_loss, calibration_error;
};

struct scored {
    double score;
    uint64_t order; /* breaks ties as if by lot */
    bool dip;
};

static int by_score(const void *a, const void *b)
{
    const struct scored *one = a, *other = b;
    if (one->score != other->score)
        return one->score > other->score ? -1 : 1;
    return (one->order > other->order) - (one->order < other->order);
}

static struct measures measure(const struct simulation *sim, const double *probability)
{
    struct scored *list = calloc(sim->input.item_count + 1, sizeof *list);
    if (list == NULL)
        abort();
    size_t n = 0, held[BINS] = {0};
    double said[BINS] = {0}, were[BINS] = {0}, loss = 0.0;
    uint64_t lot = 99;
    for (size_t i = 0; i < sim->input.item_count; i++) {
        if (!sim->truth[i].survey)
            continue;
        bool dip = sim->truth[i].class == SIM_DIP && !sim->truth[i].again;
        double p = probability[i], safe = fmin(fmax(p, 1e-4), 1.0 - 1e-4);
        list[n++] = (struct scored){p, sim_bits(&lot), dip};
        loss -= dip ? log(safe) : log1p(-safe);
        size_t bin = (size_t)fmin(p * BINS, BINS - 1);
        held[bin]++;
        said[bin] += p;
        were[bin] += dip;
    }
    qsort(list, n, sizeof *list, by_score);
    struct measures out = {.log_loss = loss / (double)n};
    double right = 0.0, dips = (double)sim->survey_dips;
    for (size_t i = 0; i < n; i++) {
        right += list[i].dip;
        double precision = right / (double)(i + 1);
        out.average_precision += list[i].dip ? precision / dips : 0.0;
        if (precision >= 0.9)
            out.found = right / dips;
    }
    for (size_t b = 0; b < BINS; b++)
        out.calibration_error += fabs(said[b] - were[b]) / (double)n;
    free(list);
    return out;
}

static struct measures measure_votes(const struct simulation *sim)
{
    double *p = calloc(sim->input.item_count + 1, sizeof *p);
    if (p == NULL)
        abort();
    for (size_t i = 0; i < sim->input.item_count; i++) {
        const struct consensus_item *item = &sim->items[i];
        for (size_t k = 0; k < item->looks; k++)
            p[i] += sim->looks[item->first_look + k].marked / (double)item->looks;
    }
    struct measures out = measure(sim, p);
    free(p);
    return out;
}

typedef bool fit_function(const struct consensus_input *input,
                          const struct consensus_settings *settings,
                          struct consensus_output *output, struct base_error *error);

static struct measures measure_fit(const struct simulation *sim, fit_function *fit,
                                   struct base_pool *pool)
{
    struct consensus_settings settings = CONSENSUS_SETTINGS_DEFAULT;
    settings.pool = pool;
    struct consensus_output out;
    struct base_error error = {0};
    double *p = calloc(sim->input.item_count + 1, sizeof *p);
    if (p == NULL || !fit(&sim->input, &settings, &out, &error)) {
        fprintf(stderr, "%s\n", error.sentence);
        exit(1);
    }
    for (size_t i = 0; i < sim->input.item_count; i++)
        p[i] = out.answers[i].probability;
    struct measures seen = measure(sim, p);
    consensus_output_free(&out);
    free(p);
    return seen;
}

struct mix {
    const char *name;
    double lures, random, never, in_pairs;
};
static const struct mix mixes[] = {
    {"easy", 0.10, 0.01, 0.01, 0.0},
    {"as designed", 0.35, 0.05, 0.05, 0.0},
    {"hostile", 0.35, 0.20, 0.05, 0.20},
};
static const double looks[] = {4.0, 8.0, 15.0};
static const char *const methods[] = {"votes", "two-class", "model"};

/* To the screen and to the file, if there is one. */
static void say(FILE *file, const char *format, ...)
{
    for (int to = 0; to < 2; to++) {
        FILE *out = to == 0 ? stdout : file;
        va_list arguments;
        va_start(arguments, format);
        if (out != NULL)
            vfprintf(out, format, arguments);
        va_end(arguments);
    }
}

static double part(const struct measures *m, int which)
{
    return which == 0   ? m->average_precision
           : which == 1 ? m->found
           : which == 2 ? m->log_loss
                        : m->calibration_error;
}

static void say_row(FILE *file, const char *method, const struct measures *seen, unsigned seeds)
{
    say(file, "    %-10s", method);
    for (int which = 0; which < 4; which++) {
        double low = INFINITY, high = -INFINITY, sum = 0.0;
        for (unsigned s = 0; s < seeds; s++) {
            low = fmin(low, part(&seen[s], which));
            high = fmax(high, part(&seen[s], which));
            sum += part(&seen[s], which);
        }
        say(file, "  %.3f (%.3f-%.3f)", sum / seeds, low, high);
    }
    say(file, "\n");
}

int main(int count, char **arguments)
{
    FILE *file = count > 1 ? fopen(arguments[1], "w") : NULL;
    unsigned seeds = count > 2 ? (unsigned)strtoul(arguments[2], NULL, 10) : 5;
    struct base_pool *pool = NULL;
    struct base_error error = {0};
    struct measures *seen = calloc(3 * (size_t)(seeds + 1), sizeof *seen);
    if (seeds == 0 || seen == NULL || (count > 1 && file == NULL) ||
        !base_pool_open(&pool, 2, 4, &error)) {
        fputs("Usage: evaluate [FILE [SEEDS]]; the file must be writable.\n", stderr);
        return 1;
    }
    say(file, "Simulated campaigns of 2,000 segments, %u seeds: mean (least-most).\n", seeds);
    for (size_t m = 0; m < 3; m++)
        for (size_t l = 0; l < 3; l++) {
            for (unsigned s = 0; s < seeds; s++) {
                struct sim_settings settings = sim_standard(1001 + s, looks[l]);
                settings.lures = mixes[m].lures;
                settings.random = mixes[m].random;
                settings.never = mixes[m].never;
                settings.in_pairs = mixes[m].in_pairs;
                struct simulation sim = sim_new(&settings);
                seen[s] = measure_votes(&sim);
                seen[seeds + s] = measure_fit(&sim, consensus_fit_two_class, pool);
                seen[2 * seeds + s] = measure_fit(&sim, consensus_fit, pool);
                sim_free(&sim);
            }
            say(file, "%s mix, %.0f looks\n", mixes[m].name, looks[l]);
            say(file, "    %-10s  %-19s  %-19s  %-19s  %-19s\n", "", "average precision",
                "found at 90 %", "log loss", "calibration error");
            for (size_t k = 0; k < 3; k++)
                say_row(file, methods[k], seen + k * seeds, seeds);
        }
    base_pool_close(pool);
    free(seen);
    return file != NULL && fclose(file) != 0;
}
