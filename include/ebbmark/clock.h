/* Times of day and durations. */
#ifndef EBBMARK_CLOCK_H
#define EBBMARK_CLOCK_H

#include <stdint.h>

/* Milliseconds since 1970-01-01 UTC by the system's clock; may step when the clock is set. */
int64_t base_clock_unix_ms(void);

/* Seconds from an arbitrary start that never steps back: for durations and rate limits. */
double base_clock_monotonic_s(void);

/* RFC 3339 in UTC with milliseconds, "2026-12-01T12:00:00.000Z", into at least BASE_CLOCK_SIZE
 * bytes; returns the buffer. */
#define BASE_CLOCK_SIZE 32
char *base_clock_rfc3339(char *buffer, int64_t unix_ms);

#endif
