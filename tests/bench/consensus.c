/*
 * The speed of the consensus on a simulated campaign, and the campaign for
 * tests/bench/consensus.py.
 *
 *     consensus time REVIEWS [THREADS]   seconds, rounds and memory of one fit on about so many
 * reviews consensus dump REVIEWS FILE        the same input in plain columns, and our fit of it
 * with the population held; prints processor seconds a round
 */
#include <inttypes.h>
#include <stdio.h>
#include <sys/resource.h>
#include <time.h>

#include "../unit/consensus/simulation.h"

#define REVIEWERS_FOR_REVIEWS 100 /* reviews a reviewer, on average */

static double seconds(clockid_t clock)
{
    struct timespec now;
    clock_gettime(clock, &now);
    return (double)now.tv_sec + 1e-9 * (double)now.tv_nsec;
}

static struct simulation campaign_of(size_t reviews)
{
    struct sim_settings settings = sim_standard(77, 8.0);
    settings.segments = reviews / 8;
    settings.people = reviews / REVIEWERS_FOR_REVIEWS;
    settings.people = settings.people < 250 ? 250 : settings.people;
    settings.even = true;
    return sim_new(&settings);
}

/* Returns the processor seconds a round. */
static double time_fit(size_t reviews, unsigned threads)
{
    struct simulation sim = campaign_of(reviews);
    struct consensus_settings settings = CONSENSUS_SETTINGS_DEFAULT;
    struct consensus_output out;
    struct base_error error = {0};
    if (!base_pool_open(&settings.pool, threads, 4, &error)) {
        fprintf(stderr, "%s\n", error.sentence);
        exit(1);
    }
    double begun = seconds(CLOCK_MONOTONIC), used = seconds(CLOCK_PROCESS_CPUTIME_ID);
    if (!consensus_fit(&sim.input, &settings, &out, &error)) {
        fprintf(stderr, "%s\n", error.sentence);
        exit(1);
    }
    double took = seconds(CLOCK_MONOTONIC) - begun;
    used = seconds(CLOCK_PROCESS_CPUTIME_ID) - used;
    struct rusage usage;
    getrusage(RUSAGE_SELF, &usage);
    printf("%zu reviews, %zu groups, %zu looks on them, %u threads: %.1f s (processor %.1f s), "
           "%u rounds%s, %ld MB\n",
           sim.reviews, sim.input.item_count, sim.input.look_count, threads, took, used, out.rounds,
           out.converged ? "" : " (not converged)", usage.ru_maxrss / 1024);
    used /= (double)out.rounds;
    consensus_output_free(&out);
    base_pool_close(settings.pool);
    sim_free(&sim);
    return used;
}

static void dump_fit(FILE *file, const struct simulation *sim, const struct consensus_output *out)
{
    const struct consensus_input *input = &sim->input;
    const struct consensus_common *common = &out->common;
    fprintf(file, "%zu %zu %zu %.17g %.17g %u\n", input->item_count, input->look_count,
            input->people, input->days_total, out->log_likelihood, out->rounds);
    fprintf(file, "%.17g %.17g %.17g %.17g %.17g %.17g %.17g %.17g %.17g %.17g %.17g %.17g %.17g\n",
            common->beta, common->gamma, common->tau_dip, common->tau_lure, common->kappa,
            common->dips_per_d, common->lures_per_d, common->chance_per_d, common->together_per_d,
            common->hit_mean, common->hit_sd, common->lure_mean, common->lure_sd);
    for (int c = 0; c < 3; c++) {
        fprintf(file, "%.17g", common->sure[c]);
        for (int k = 0; k < CONSENSUS_X_KNOTS; k++)
            fprintf(file, " %.17g", common->x_share[c][k]);
        fputc('\n', file);
    }
    for (size_t j = 0; j < input->people; j++)
        fprintf(file, "%.17g %.17g %.17g %.17g %.17g\n", sim->days[j], out->people[j].hit_logit,
                out->people[j].lure_logit, out->people[j].log_chance_per_d,
                out->people[j].log_together);
    for (size_t g = 0; g < input->item_count; g++)
        fprintf(file, "%zu %.17g %.17g %d %d %.17g\n", sim->items[g].looks, sim->items[g].snr,
                sim->items[g].duration_d, sim->items[g].known, sim->items[g].control,
                out->answers[g].probability);
    for (size_t k = 0; k < input->look_count; k++)
        fprintf(file, "%" PRId32 " %d %d %.9g\n", sim->looks[k].person, sim->looks[k].marked,
                sim->looks[k].sure, (double)sim->looks[k].centre_d);
}

/* The fit with the population held, whose optimum is that of one function. */
static int dump(size_t reviews, const char *path)
{
    struct simulation sim = campaign_of(reviews);
    struct consensus_settings settings = CONSENSUS_SETTINGS_DEFAULT;
    struct consensus_output free_fit, out;
    struct base_error error = {0};
    FILE *file = fopen(path, "w");
    bool ok = file != NULL && consensus_fit(&sim.input, &settings, &free_fit, &error);
    if (ok) {
        const struct consensus_start start = {&free_fit.common, NULL, 0};
        settings.start = &start;
        settings.hold = 1;
        settings.tolerance = 1e-13;
        settings.rounds_max = 5000;
        double used = seconds(CLOCK_PROCESS_CPUTIME_ID);
        ok = consensus_fit(&sim.input, &settings, &out, &error);
        used = seconds(CLOCK_PROCESS_CPUTIME_ID) - used;
        if (ok)
            printf("%.9f\n", used / (double)out.rounds);
        consensus_output_free(&free_fit);
    }
    if (ok) {
        dump_fit(file, &sim, &out);
        consensus_output_free(&out);
    }
    ok = file != NULL && fclose(file) == 0 && ok;
    if (!ok)
        fprintf(stderr, "The campaign could not be written to %s. %s\n", path, error.sentence);
    sim_free(&sim);
    return ok ? 0 : 1;
}

int main(int count, char **arguments)
{
    size_t reviews = count > 2 ? strtoull(arguments[2], NULL, 10) : 0;
    if (count == 1) {
        double small = time_fit(100000, 2), large = time_fit(1000000, 2);
        printf("ten times the reviews cost %.1f times the processor time a round\n", large / small);
        return 0;
    }
    if (count > 2 && reviews >= 1000 && strcmp(arguments[1], "time") == 0) {
        (void)time_fit(reviews, count > 3 ? (unsigned)strtoul(arguments[3], NULL, 10) : 2);
        return 0;
    }
    if (count > 3 && reviews >= 1000 && strcmp(arguments[1], "dump") == 0)
        return dump(reviews, arguments[3]);
    fputs("Usage: consensus [time REVIEWS [THREADS] | dump REVIEWS FILE]; 1000 or more.\n", stderr);
    return 1;
}
