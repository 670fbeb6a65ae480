/* Counts of what is stored, taken now and then: counting goes over whole tables. Thread-safe. */
#ifndef API_METRICS_H
#define API_METRICS_H

struct metrics_counts;

/* NULL when out of memory. */
struct metrics_counts *metrics_counts_new(void);
void metrics_counts_free(struct metrics_counts *counts);

#endif
