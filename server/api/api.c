/* Start and stop: the campaign's routes on a server. */
#include "ebbmark/api.h"

#include <assert.h>
#include <stdlib.h>
#include <unistd.h>

#include "call.h"
#include "ebbmark/clock.h"
#include "embedded.h"
#include "flux_kept.h"
#include "metrics.h"
#include "routes.h"
#include "segment_bounds.h"

#define COOKIE "ebbmark_session"
#define FLUX_WORKERS 2
#define FLUX_WAITING_MOST 512
#define SLOW_WORKERS 4
#define SLOW_WAITING_MOST 512
#define THREADS_MOST 8

struct api_server {
    struct api api;
    struct http_server *http;
};

_Static_assert((int)HTTP_REVIEWER == (int)STORE_REVIEWER &&
                   (int)HTTP_SCIENCE == (int)STORE_SCIENCE && (int)HTTP_ADMIN == (int)STORE_ADMIN,
               "roles are the same in both rooms");

static bool identify(void *context, const char *secret, bool is_token, struct http_identity *out)
{
    const struct api *api = context;
    struct store_access_found found;
    if (!campaign_access_check(api->campaign, is_token ? STORE_TOKEN : STORE_SESSION, secret,
                               &found, NULL))
        return false;
    *out = (struct http_identity){.person = found.person,
                                  .role = (enum http_who)found.role,
                                  .by_token = is_token,
                                  .suspended = found.suspended,
                                  .ends_ms = found.ends_ms};
    return true;
}

static unsigned threads_wanted(void)
{
    long processors = sysconf(_SC_NPROCESSORS_ONLN);
    return processors < 2 ? 2 : processors > THREADS_MOST ? THREADS_MOST : (unsigned)processors;
}

/* 0: the default; negative: none. */
static double rate_or(double given, double standard)
{
    return given < 0.0 ? 0.0 : given > 0.0 ? given : standard;
}

static bool serve(struct api_server *server, const struct api_options *options,
                  struct base_error *error)
{
    const struct http_options how = {
        .listen = options->listen,
        .threads = threads_wanted(),
        .workers = SLOW_WORKERS,
        .waiting_max = SLOW_WAITING_MOST,
        .person_rate = rate_or(options->person_rate, API_PERSON_RATE),
        .person_burst = rate_or(options->person_burst, API_PERSON_BURST),
        .address_rate = rate_or(options->address_rate, API_ADDRESS_RATE),
        .address_burst = rate_or(options->address_burst, API_ADDRESS_BURST),
        .trusted_proxies = options->trusted_proxies,
        .tls_cert = options->tls_cert,
        .tls_key = options->tls_key,
        .routes = api_routes,
        .files = web_files,
        .file_count = web_file_count,
        .cookie_name = COOKIE,
        .identify = identify,
        .context = &server->api,
        .log = options->log};
    return http_start(&how, &server->http, error);
}

/* Everything but the HTTP server. */
static void let_go(struct api_server *server)
{
    base_pool_close(server->api.workers);
    flux_kept_free(server->api.flux);
    http_kept_drop(server->api.description);
    metrics_counts_free(server->api.counts);
    segment_bounds_free(server->api.bounds);
    free(server);
}

bool api_start(struct campaign *campaign, const struct api_options *options,
               struct api_server **out, struct base_error *error)
{
    assert(options->listen != NULL && (options->tls_cert == NULL) == (options->tls_key == NULL));
    *out = NULL;
    struct api_server *server = calloc(1, sizeof *server);
    if (server == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for the server.");
    struct api *api = &server->api;
    api->campaign = campaign;
    api->store = campaign_store(campaign);
    api->began_s = base_clock_monotonic_s();
    api->flux = flux_kept_new(options->flux_kept_bytes > 0 ? options->flux_kept_bytes
                                                           : API_FLUX_KEPT_BYTES);
    api->counts = metrics_counts_new();
    api->bounds = segment_bounds_new();
    api->description = http_kept_make(api_description.media_type, api_description.data,
                                      api_description.size, api_description.etag, "no-cache");
    bool ok =
        api->flux != NULL && api->counts != NULL && api->bounds != NULL && api->description != NULL
            ? base_pool_open(&api->workers, FLUX_WORKERS, FLUX_WAITING_MOST, error) &&
                  serve(server, options, error)
            : base_fail(error, BASE_MEMORY, "There is no memory for the server.");
    if (!ok) {
        let_go(server);
        return false;
    }
    *out = server;
    return true;
}

uint16_t api_port(const struct api_server *server)
{
    return http_port(server->http);
}

void api_stop(struct api_server *server, double grace_s)
{
    http_stop(server->http, grace_s);
    /* Flux that is still being made is nobody's any more, but is finished. */
    let_go(server);
}
