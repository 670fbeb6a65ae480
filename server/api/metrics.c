/*
 * What goes on inside, in the text format that Prometheus reads: a table of figures, each with its
 * kind and a sentence.
 */
#include "metrics.h"

#include <inttypes.h>
#include <pthread.h>
#include <stdlib.h>
#include <string.h>

#include "call.h"
#include "ebbmark/clock.h"
#include "ebbmark/text.h"
#include "flux_kept.h"
#include "routes.h"

#define MEDIA_TYPE "text/plain; version=0.0.4; charset=utf-8"
#define COUNTED_AGAIN_S 60.0

struct metrics_counts {
    pthread_mutex_t lock; /* guards the rest, and is held while counting: once is enough */
    struct store_counts counts;
    double counted_s; /* monotonic; 0: never */
};

struct metrics_counts *metrics_counts_new(void)
{
    struct metrics_counts *counts = calloc(1, sizeof *counts);
    if (counts != NULL)
        (void)pthread_mutex_init(&counts->lock, NULL);
    return counts;
}

void metrics_counts_free(struct metrics_counts *counts)
{
    if (counts == NULL)
        return;
    (void)pthread_mutex_destroy(&counts->lock);
    free(counts);
}

static bool counts_now(struct api_call *call, struct store_counts *out)
{
    struct metrics_counts *kept = call->api->counts;
    bool ok = true;
    (void)pthread_mutex_lock(&kept->lock);
    double now = base_clock_monotonic_s();
    if (kept->counted_s <= 0.0 || now - kept->counted_s >= COUNTED_AGAIN_S) {
        ok = store_count(call->store, &kept->counts, &call->error);
        if (ok)
            kept->counted_s = now;
    }
    *out = kept->counts;
    (void)pthread_mutex_unlock(&kept->lock);
    return ok;
}

/* ---- the figures ---------------------------------------------------------------------------- */

struct seen {
    struct http_counts http;
    struct campaign_figures campaign;
    struct flux_kept_figures flux;
    struct store_counts store;
    struct store_run run; /* the newest; id 0: none */
    bool run_working;
    double uptime_s;
};

static bool look(struct api_call *call, struct seen *out)
{
    int64_t run = 0;
    *out = (struct seen){.campaign = campaign_figures_now(call->campaign),
                         .flux = flux_kept_figures_now(call->api->flux),
                         .run_working = campaign_run_state_now(call->campaign).working,
                         .uptime_s = base_clock_monotonic_s() - call->api->began_s};
    http_count(http_server_of(call->exchange), &out->http);
    return counts_now(call, &out->store) && store_run_current(call->store, &run, &call->error) &&
           (run == 0 || store_run_read(call->store, call->arena, run, &out->run, &call->error));
}

static void add(struct base_text *text, const char *name, const char *kind, const char *sentence,
                double value)
{
    char number[BASE_NUMBER_SIZE];
    base_text_add_format(text, "# HELP ebbmark_%s %s\n# TYPE ebbmark_%s %s\nebbmark_%s %s\n", name,
                         sentence, name, kind, name, base_text_number(number, value));
}

static void add_answers(struct base_text *text, const struct http_counts *http)
{
    base_text_add(text, "# HELP ebbmark_http_answers_total Answers since the start, by the "
                        "status's first digit; 0 were cut off before one.\n"
                        "# TYPE ebbmark_http_answers_total counter\n");
    for (unsigned i = 0; i < sizeof http->answers / sizeof http->answers[0]; i++)
        base_text_add_format(text, "ebbmark_http_answers_total{class=\"%u\"} %" PRIu64 "\n", i,
                             http->answers[i]);
}

static void write_figures(struct base_text *text, const struct seen *seen)
{
    const struct campaign_figures *campaign = &seen->campaign;
    const struct {
        const char *name, *kind, *sentence;
        double value;
    } figures[] = {
        {"uptime_seconds", "gauge", "Since the server was started.", seen->uptime_s},
        {"http_connections", "gauge", "Open connections.", (double)seen->http.connections},
        {"http_in_flight", "gauge", "Requests being answered.", (double)seen->http.in_flight},
        {"http_waiting", "gauge", "Requests waiting for a worker.", (double)seen->http.waiting},
        {"reviews_taken_total", "counter", "Reviews stored since the start.",
         (double)campaign->reviews_taken},
        {"reviews_failed_total", "counter", "Reviews that could not be stored, since the start.",
         (double)campaign->reviews_failed},
        {"review_groups_total", "counter", "Transactions that stored reviews, since the start.",
         (double)campaign->review_groups},
        {"reviews_waiting", "gauge", "Reviews waiting to be stored.",
         (double)campaign->reviews_waiting},
        {"leases_given_total", "counter", "Segments handed out since the start.",
         (double)campaign->leases_given},
        {"leases_out", "gauge", "Segments that reviewers hold now.", (double)campaign->leases_live},
        {"segments_open", "gauge", "Segments that still need looks.",
         (double)campaign->segments_queued},
        {"people_remembered", "gauge", "People whose looks are kept in memory.",
         (double)campaign->people_remembered},
        {"runs_done_total", "counter", "Consensus runs finished since the start.",
         (double)campaign->runs_done},
        {"runs_failed_total", "counter", "Consensus runs that failed since the start.",
         (double)campaign->runs_failed},
        {"run_working", "gauge", "Whether a consensus run is at work (1).",
         seen->run_working ? 1.0 : 0.0},
        {"run_newest", "gauge", "Number of the newest consensus run; 0: none.",
         (double)seen->run.id},
        {"run_newest_finished_seconds", "gauge",
         "When the newest consensus run finished, in seconds since 1970; 0: none.",
         (double)seen->run.finished_ms / 1000.0},
        {"run_newest_reviews", "gauge", "Reviews that the newest consensus run counted.",
         (double)seen->run.reviews},
        {"run_newest_candidates", "gauge", "Candidates of the newest consensus run.",
         (double)seen->run.candidates},
        {"flux_kept_bodies", "gauge", "Segments' flux kept ready.", (double)seen->flux.bodies},
        {"flux_kept_bytes", "gauge", "Memory of the flux kept ready.", (double)seen->flux.bytes},
        {"flux_found_total", "counter", "Requests for flux that was ready, since the start.",
         (double)seen->flux.found},
        {"flux_missed_total", "counter", "Requests for flux that had to be made, since the start.",
         (double)seen->flux.missed},
        {"stored_stars", "gauge", "Stars stored; counted once a minute.",
         (double)seen->store.stars},
        {"stored_segments", "gauge", "Segments stored; counted once a minute.",
         (double)seen->store.segments},
        {"stored_reviews", "gauge", "Reviews stored; counted once a minute.",
         (double)seen->store.reviews},
        {"stored_marks", "gauge", "Marks stored; counted once a minute.",
         (double)seen->store.marks},
        {"stored_people", "gauge", "People who have not left; counted once a minute.",
         (double)seen->store.people},
    };
    for (size_t i = 0; i < sizeof figures / sizeof figures[0]; i++)
        add(text, figures[i].name, figures[i].kind, figures[i].sentence, figures[i].value);
    add_answers(text, &seen->http);
}

/* GET /metrics */
static enum http_result show(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct seen seen;
    struct base_text text = {0};
    if (!api_call_begin(&call, exchange, context) || !look(&call, &seen))
        return api_call_end(&call);
    write_figures(&text, &seen);
    enum http_result result;
    if (text.failed) {
        (void)base_fail(&call.error, BASE_MEMORY, "There is no memory to write the figures.");
        result = api_call_end(&call);
    } else {
        result = http_answer_bytes(exchange, 200, MEDIA_TYPE, text.data, text.length);
    }
    base_text_free(&text);
    return result;
}

const struct http_route api_metrics_routes[] = {
    {"GET", "/metrics", HTTP_ANYONE, HTTP_SLOW, 0, show}, {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
