#include "request_log.h"

#include <stdio.h>
#include <string.h>
#include <unistd.h>

#include "ebbmark/clock.h"

#define ADDRESS_MAX 256 /* characters of the target that are logged */
/* That many, escaped, and what stands around them. */
#define LINE_SIZE (6 * ADDRESS_MAX + 512)

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

/* A line under construction. The sizes below bound it, so nothing checks for room; printf would,
 * and is what a busy server spent most of its own time on. */
struct line {
    char text[LINE_SIZE];
    size_t used;
};

static void put(struct line *line, const char *text)
{
    size_t length = strlen(text);
    memcpy(line->text + line->used, text, length);
    line->used += length;
}

static void put_number(struct line *line, uint64_t number)
{
    char digits[20];
    size_t count = 0;
    do
        digits[count++] = (char)('0' + number % 10);
    while ((number /= 10) > 0);
    while (count > 0)
        line->text[line->used++] = digits[--count];
}

/* The path without the query, escaped for JSON; what is not printable ASCII as \u00XX. */
static void put_path(struct line *line, const char *address)
{
    static const char digits[] = "0123456789abcdef";
    char *to = line->text + line->used;
    for (size_t i = 0; i < ADDRESS_MAX && address[i] != '\0' && address[i] != '?'; i++) {
        unsigned char c = (unsigned char)address[i];
        if (c >= 0x20 && c < 0x7f && c != '"' && c != '\\') {
            *to++ = (char)c;
        } else {
            *to++ = '\\';
            *to++ = 'u';
            *to++ = '0';
            *to++ = '0';
            *to++ = digits[c >> 4];
            *to++ = digits[c & 15];
        }
    }
    line->used = (size_t)(to - line->text);
}

/* Whose address is logged: that of requests turned away, so that an operator can act on them; of
 * the rest nothing is kept that says where a person was. */
static bool names_address(unsigned status)
{
    return status == 401 || status == 403 || status == 429;
}

/* The method as a word of ours: what a client made up does not belong in a log. */
static const char *method_text(const char *method)
{
    static const char *const known[] = {"GET", "HEAD", "POST", "PATCH", "DELETE", "PUT", "OPTIONS"};
    for (size_t i = 0; method != NULL && i < sizeof known / sizeof known[0]; i++)
        if (strcmp(method, known[i]) == 0)
            return known[i];
    return "other";
}

/* All but the time, which depends on the lock. */
static void put_request(struct line *line, const struct http_exchange *exchange, double took_s,
                        bool cut)
{
    uint64_t tenths_ms = took_s > 0.0 ? (uint64_t)(took_s * 10000.0 + 0.5) : 0;
    put(line, "\",\"event\":\"request\",\"request\":\"");
    put(line, exchange->id);
    put(line, "\",\"method\":\"");
    put(line, method_text(exchange->method));
    put(line, "\",\"path\":\"");
    put_path(line, exchange->address);
    put(line, "\",\"status\":");
    put_number(line, exchange->sent_status);
    put(line, ",\"ms\":");
    put_number(line, tenths_ms / 10);
    put(line, ".");
    put_number(line, tenths_ms % 10);
    put(line, ",\"person\":");
    put_number(line, (uint64_t)exchange->identity.person);
    if (exchange->refused_at != NULL) {
        put(line, ",\"refused_at\":\"");
        put(line, exchange->refused_at);
        put(line, "\"");
    }
    if (names_address(exchange->sent_status)) {
        char address[HTTP_IP_SIZE];
        put(line, ",\"from\":\"");
        put(line, http_ip_write(&exchange->ip, address));
        put(line, "\"");
    }
    put(line, cut ? ",\"cut\":true}\n" : "}\n");
}

/* The lock is held. "{"at":"2026-12-01T12:00:00.000Z","level":"info": the text of the second is
 * made once. */
static void put_start(struct http_request_log *log, struct line *line, bool is_warning)
{
    int64_t now_ms = base_clock_unix_ms();
    if (now_ms / 1000 != log->second) {
        char text[BASE_CLOCK_SIZE];
        log->second = now_ms / 1000;
        (void)snprintf(log->second_text, sizeof log->second_text, "%.19s",
                       base_clock_rfc3339(text, now_ms));
    }
    uint64_t thousandths = (uint64_t)(now_ms % 1000);
    put(line, "{\"at\":\"");
    put(line, log->second_text);
    put(line, thousandths < 10 ? ".00" : thousandths < 100 ? ".0" : ".");
    put_number(line, thousandths);
    put(line, is_warning ? "Z\",\"level\":\"warning" : "Z\",\"level\":\"info");
}

void http_request_log_note(struct http_request_log *log, const struct http_exchange *exchange,
                           double now_s, bool cut)
{
    bool is_warning = exchange->sent_status >= 500;
    enum base_log_level level = is_warning ? BASE_LOG_WARNING : BASE_LOG_INFO;
    if (log->log == NULL || log->log->fd < 0 || level < log->log->least)
        return;
    struct line request, start;
    request.used = start.used = 0;
    put_request(&request, exchange, now_s - exchange->began_s, cut);
    (void)pthread_mutex_lock(&log->lock);
    put_start(log, &start, is_warning);
    if (log->used + start.used + request.used > sizeof log->piece)
        write_out(log);
    memcpy(log->piece + log->used, start.text, start.used);
    memcpy(log->piece + log->used + start.used, request.text, request.used);
    log->used += start.used + request.used;
    if (is_warning)
        write_out(log);
    (void)pthread_mutex_unlock(&log->lock);
}
