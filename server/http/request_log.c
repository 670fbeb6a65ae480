#include "request_log.h"

#include <stdio.h>
#include <string.h>
#include <unistd.h>

#include "ebbmark/clock.h"

#define LINE_MAX_SIZE 1024
#define ADDRESS_MAX 256 /* characters of the target that are logged */

void http_request_log_begin(struct http_request_log *log, const struct base_log *to)
{
    log->log = to;
    (void)pthread_mutex_init(&log->lock, NULL);
}

/* The lock is held. Best effort, as in the log itself: there is nowhere to complain to. */
static void write_out(struct http_request_log *log)
{
    for (size_t at = 0; at < log->used;) {
        ssize_t wrote = write(log->log->fd, log->piece + at, log->used - at);
        if (wrote <= 0)
            break;
        at += (size_t)wrote;
    }
    log->used = 0;
}

void http_request_log_flush(struct http_request_log *log)
{
    (void)pthread_mutex_lock(&log->lock);
    if (log->used > 0)
        write_out(log);
    (void)pthread_mutex_unlock(&log->lock);
}

void http_request_log_end(struct http_request_log *log)
{
    http_request_log_flush(log);
    (void)pthread_mutex_destroy(&log->lock);
}

/* The path without the query, escaped for JSON; what is not printable ASCII as \u00XX. */
static void write_path(const char *address, char out[static 6 * ADDRESS_MAX + 1])
{
    static const char digits[] = "0123456789abcdef";
    char *to = out;
    for (size_t i = 0; i < ADDRESS_MAX && address[i] != '\0' && address[i] != '?'; i++) {
        unsigned char c = (unsigned char)address[i];
        if (c >= 0x20 && c < 0x7f && c != '"' && c != '\\') {
            *to++ = (char)c;
        } else {
            memcpy(to, "\\u00", 4);
            to[4] = digits[c >> 4];
            to[5] = digits[c & 15];
            to += 6;
        }
    }
    *to = '\0';
}

/* The lock is held. */
static const char *time_text(struct http_request_log *log, int64_t now_ms)
{
    if (now_ms / 1000 != log->second) {
        char text[BASE_CLOCK_SIZE];
        log->second = now_ms / 1000;
        (void)snprintf(log->second_text, sizeof log->second_text, "%.19s",
                       base_clock_rfc3339(text, now_ms));
    }
    return log->second_text;
}

/* Whose address is logged: that of requests turned away, so that an operator can act on them; of
 * the rest nothing is kept that says where a person was. */
static bool names_address(unsigned status)
{
    return status == 401 || status == 403 || status == 429;
}

static const char *method_text(const char *method)
{
    static const char *const known[] = {"GET", "HEAD", "POST", "PATCH", "DELETE", "PUT", "OPTIONS"};
    for (size_t i = 0; method != NULL && i < sizeof known / sizeof known[0]; i++)
        if (strcmp(method, known[i]) == 0)
            return known[i];
    return "other";
}

void http_request_log_note(struct http_request_log *log, const struct http_exchange *exchange,
                           double now_s, bool cut)
{
    enum base_log_level level = exchange->sent_status >= 500 ? BASE_LOG_WARNING : BASE_LOG_INFO;
    if (log->log == NULL || log->log->fd < 0 || level < log->log->least)
        return;
    char path[6 * ADDRESS_MAX + 1], rest[256], address[HTTP_IP_SIZE] = "";
    write_path(exchange->address, path);
    if (names_address(exchange->sent_status))
        (void)http_ip_write(&exchange->ip, address);
    (void)snprintf(rest, sizeof rest,
                   "\"request\":\"%s\",\"method\":\"%s\",\"status\":%u,\"ms\":%.1f,"
                   "\"person\":%lld%s%s%s%s%s%s%s",
                   exchange->id, method_text(exchange->method), exchange->sent_status,
                   (now_s - exchange->began_s) * 1000.0, (long long)exchange->identity.person,
                   exchange->refused_at != NULL ? ",\"refused_at\":\"" : "",
                   exchange->refused_at != NULL ? exchange->refused_at : "",
                   exchange->refused_at != NULL ? "\"" : "",
                   address[0] != '\0' ? ",\"from\":\"" : "", address,
                   address[0] != '\0' ? "\"" : "", cut ? ",\"cut\":true" : "");
    int64_t now_ms = base_clock_unix_ms();
    (void)pthread_mutex_lock(&log->lock);
    char line[LINE_MAX_SIZE + sizeof path];
    int length = snprintf(line, sizeof line,
                          "{\"at\":\"%s.%03dZ\",\"level\":\"%s\",\"event\":\"request\",%s,"
                          "\"path\":\"%s\"}\n",
                          time_text(log, now_ms), (int)(now_ms % 1000),
                          level == BASE_LOG_INFO ? "info" : "warning", rest, path);
    if (length > 0 && (size_t)length < sizeof line) {
        if (log->used + (size_t)length > sizeof log->piece)
            write_out(log);
        memcpy(log->piece + log->used, line, (size_t)length);
        log->used += (size_t)length;
        if (level != BASE_LOG_INFO)
            write_out(log);
    }
    (void)pthread_mutex_unlock(&log->lock);
}
