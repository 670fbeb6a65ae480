/*
 * Linking for tests/reference/series.py. Reads from stdin, one command a line:
 *   watch N CADENCE   followed by N lines "time"
 *   rule NAME VALUE   period_least_d, chance_missed or evidence_least
 *   link N            followed by N lines "mid mid_error depth depth_error duration duration_error
 *                     probability"; prints, for each series,
 *                       series MEMBERS ALIASES SURVIVING RANGES
 *                       member EVENT CYCLE                                     one a member
 *                       alias PERIOD ERROR EPOCH ERROR COVARIANCE CHI2 MISSING EVIDENCE SHARE
 *                       range FROM TO
 *                     and then a line "end"
 */
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/series.h"

static void stop(const char *why)
{
    fprintf(stderr, "series_driver: %s\n", why);
    exit(1);
}

static void print_series(const struct ephemeris_series *series)
{
    printf("series %zu %zu %zu %zu\n", series->members, series->aliases, series->surviving,
           series->ranges);
    for (size_t i = 0; i < series->members; i++)
        printf("member %zu %lld\n", series->member[i],
               series->cycle == NULL ? 0LL : (long long)series->cycle[i]);
    for (size_t i = 0; i < series->aliases; i++) {
        const struct ephemeris_alias *alias = &series->alias[i];
        printf("alias %.17g %.17g %.17g %.17g %.17g %.17g %zu %.17g %.17g\n", alias->line.period_d,
               alias->line.period_error_d, alias->line.epoch_d, alias->line.epoch_error_d,
               alias->line.covariance_d2, alias->line.chi2, alias->missing, alias->evidence,
               alias->share);
    }
    for (size_t i = 0; i < series->ranges; i++)
        printf("range %.17g %.17g\n", series->range[i].from_d, series->range[i].to_d);
}

static void link_events(const struct ephemeris_watch *watch,
                        const struct ephemeris_link_rules *rules, size_t count)
{
    struct ephemeris_event *event = calloc(count + 1, sizeof *event);
    struct base_arena *arena = base_arena_new(0);
    struct ephemeris_linked linked;
    struct base_error error;
    if (event == NULL || arena == NULL)
        stop("out of memory");
    for (size_t i = 0; i < count; i++)
        if (scanf("%lf %lf %lf %lf %lf %lf %lf", &event[i].mid_d, &event[i].mid_error_d,
                  &event[i].depth, &event[i].depth_error, &event[i].duration_d,
                  &event[i].duration_error_d, &event[i].probability) != 7)
            stop("an event is missing");
    if (!ephemeris_series_link(event, count, watch, rules, arena, &linked, &error))
        stop(error.sentence);
    for (size_t i = 0; i < linked.count; i++)
        print_series(&linked.series[i]);
    printf("end\n");
    base_arena_free(arena);
    free(event);
}

static void read_times(double **time, struct ephemeris_watch *watch)
{
    free(*time);
    if (scanf("%zu %lf", &watch->count, &watch->cadence_d) != 2)
        stop("the watch is wrong");
    *time = calloc(watch->count + 1, sizeof **time);
    if (*time == NULL)
        stop("out of memory");
    for (size_t i = 0; i < watch->count; i++)
        if (scanf("%lf", &(*time)[i]) != 1)
            stop("a time is missing");
    watch->time = *time;
}

static void set_rule(struct ephemeris_link_rules *rules)
{
    char name[32];
    double value;
    if (scanf("%31s %lf", name, &value) != 2)
        stop("the rule is wrong");
    if (strcmp(name, "period_least_d") == 0)
        rules->period_least_d = value;
    else if (strcmp(name, "chance_missed") == 0)
        rules->chance_missed = value;
    else if (strcmp(name, "evidence_least") == 0)
        rules->evidence_least = value;
    else
        stop("no such rule");
}

int main(void)
{
    struct ephemeris_watch watch = {.cadence_d = 0.02};
    struct ephemeris_link_rules rules = ephemeris_link_rules_usual;
    double *time = NULL;
    char command[16];
    size_t count;
    while (scanf("%15s", command) == 1) {
        if (strcmp(command, "watch") == 0)
            read_times(&time, &watch);
        else if (strcmp(command, "rule") == 0)
            set_rule(&rules);
        else if (strcmp(command, "link") == 0 && scanf("%zu", &count) == 1)
            link_events(&watch, &rules, count);
        else
            stop(command);
    }
    free(time);
    return ferror(stdin) || fflush(stdout) != 0;
}
