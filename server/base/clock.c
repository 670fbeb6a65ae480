#include "ebbmark/clock.h"

#include <stdio.h>
#include <time.h>

int64_t base_clock_unix_ms(void)
{
    struct timespec now;
    (void)clock_gettime(CLOCK_REALTIME, &now);
    return (int64_t)now.tv_sec * 1000 + now.tv_nsec / 1000000;
}

double base_clock_monotonic_s(void)
{
    struct timespec now;
    (void)clock_gettime(CLOCK_MONOTONIC, &now);
    return (double)now.tv_sec + 1e-9 * (double)now.tv_nsec;
}

char *base_clock_rfc3339(char *buffer, int64_t unix_ms)
{
    int64_t milliseconds = unix_ms % 1000;
    if (milliseconds < 0)
        milliseconds += 1000;
    time_t seconds = (time_t)((unix_ms - milliseconds) / 1000);
    struct tm parts;
    if (gmtime_r(&seconds, &parts) == NULL || parts.tm_year + 1900 > 9999 ||
        parts.tm_year + 1900 < 0) {
        buffer[0] = '\0';
        return buffer;
    }
    size_t length = strftime(buffer, BASE_CLOCK_SIZE, "%Y-%m-%dT%H:%M:%S", &parts);
    (void)snprintf(buffer + length, BASE_CLOCK_SIZE - length, ".%03dZ", (int)milliseconds);
    return buffer;
}
