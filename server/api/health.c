#include <inttypes.h>

#include "ebbmark/clock.h"
#include "ebbmark/text.h"
#include "inside.h"

static enum http_result healthz(struct http_exchange *exchange, void *context)
{
    (void)context;
    return answer_json(exchange, 200, json_pack("{s:s}", "status", "up"));
}

static enum http_result readyz(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    struct base_error error = {0};
    if (!store_ready(campaign_store(api->campaign), &error))
        return http_answer_problem(exchange, "overloaded", NULL, "%s", error.sentence);
    return answer_json(exchange, 200, json_pack("{s:s}", "status", "ready"));
}

/* One metric in the Prometheus text format. */
static void add(struct base_text *text, const char *name, const char *type, const char *help,
                double value)
{
    char number[BASE_NUMBER_SIZE];
    base_text_add_format(text, "# HELP %s %s\n# TYPE %s %s\n%s %s\n", name, help, name, type, name,
                         base_text_number(number, value));
}

static enum http_result metrics(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    struct campaign_figures now = campaign_figures_now(api->campaign);
    struct http_counts http;
    struct base_text text = {0};
    http_count(api->http, &http);
    add(&text, "ebbmark_uptime_seconds", "gauge", "Seconds since the server started.",
        base_clock_monotonic_s() - api->began_s);
    add(&text, "ebbmark_connections", "gauge", "Open connections.", (double)http.connections);
    add(&text, "ebbmark_requests_in_flight", "gauge", "Requests being answered.",
        (double)http.in_flight);
    add(&text, "ebbmark_requests_waiting", "gauge", "Requests that wait for a worker.",
        (double)http.waiting);
    base_text_add(&text, "# HELP ebbmark_answers_total Answers by the first digit of the status.\n"
                         "# TYPE ebbmark_answers_total counter\n");
    for (unsigned digit = 1; digit < 6; digit++)
        base_text_add_format(&text, "ebbmark_answers_total{status=\"%uxx\"} %" PRIu64 "\n", digit,
                             http.answers[digit]);
    add(&text, "ebbmark_segments_queued", "gauge", "Open segments that may be handed out.",
        (double)now.segments_queued);
    add(&text, "ebbmark_leases_live", "gauge", "Segments handed out and not yet answered.",
        (double)now.leases_live);
    add(&text, "ebbmark_leases_given_total", "counter", "Leases given.", (double)now.leases_given);
    add(&text, "ebbmark_reviews_waiting", "gauge", "Reviews that wait to be stored.",
        (double)now.reviews_waiting);
    add(&text, "ebbmark_reviews_taken_total", "counter", "Reviews stored.",
        (double)now.reviews_taken);
    add(&text, "ebbmark_reviews_failed_total", "counter", "Reviews that could not be stored.",
        (double)now.reviews_failed);
    add(&text, "ebbmark_review_groups_total", "counter", "Transactions that stored reviews.",
        (double)now.review_groups);
    add(&text, "ebbmark_runs_done_total", "counter", "Consensus runs finished.",
        (double)now.runs_done);
    add(&text, "ebbmark_runs_failed_total", "counter", "Consensus runs that failed.",
        (double)now.runs_failed);
    enum http_result result =
        text.failed ? http_answer_problem(exchange, "internal", NULL, "There is no memory.")
                    : http_answer_bytes(exchange, 200, "text/plain; version=0.0.4; charset=utf-8",
                                        text.data, text.length);
    base_text_free(&text);
    return result;
}

const struct http_route api_health_routes[] = {
    {"GET", "/healthz", HTTP_ANYONE, 0, 0, healthz},
    {"GET", "/readyz", HTTP_ANYONE, HTTP_SLOW, 0, readyz},
    {"GET", "/metrics", HTTP_ANYONE, HTTP_SLOW, 0, metrics},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
