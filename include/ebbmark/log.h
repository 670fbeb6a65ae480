/*
 * Structured log lines on a file descriptor, one JSON object a line:
 * {"at":"2026-12-01T12:00:00.000Z","level":"info","event":"batch_loaded", …}.
 * Safe from many threads: a line is written by one write(2). Never log a secret or a passphrase.
 */
#ifndef EBBMARK_LOG_H
#define EBBMARK_LOG_H

enum base_log_level { BASE_LOG_DEBUG, BASE_LOG_INFO, BASE_LOG_WARNING, BASE_LOG_ERROR };

struct base_log {
    int fd;                    /* where lines go; -1: nowhere */
    enum base_log_level least; /* lines below this are dropped */
};

/* One line. `event` is a fixed snake_case word; then key, text pairs ended by NULL:
 * base_log_line(log, BASE_LOG_INFO, "batch_loaded", "batch", name, "stars", "60", NULL).
 * Values are escaped, so that hostile text cannot forge a line. `log` may be NULL. */
void base_log_line(const struct base_log *log, enum base_log_level level, const char *event, ...)
    __attribute__((sentinel));

#endif
