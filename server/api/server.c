#include <stdlib.h>

#include "ebbmark/clock.h"
#include "inside.h"

#define FLUX_CACHE_BYTES (256u << 20)
#define PERSON_RATE 20.0 /* requests a second; a hand on the Desk makes one or two */
#define PERSON_BURST 200.0
#define ADDRESS_RATE 200.0 /* a classroom behind one address */
#define ADDRESS_BURST 2000.0

static bool identify(void *context, const char *secret, bool is_token, struct http_identity *out)
{
    struct api_server *api = context;
    struct store_access_found found;
    struct base_error error = {0};
    if (!campaign_access_check(api->campaign, is_token ? STORE_TOKEN : STORE_SESSION, secret,
                               &found, &error)) {
        if (error.kind != BASE_NOT_FOUND)
            base_log_line(api->log, BASE_LOG_ERROR, "identity_not_read", "why", error.sentence,
                          NULL);
        return false;
    }
    *out = (struct http_identity){.person = found.person,
                                  .role = (enum http_who)found.role,
                                  .by_token = is_token,
                                  .suspended = found.suspended,
                                  .ends_ms = found.ends_ms};
    return true;
}

bool api_start(struct campaign *campaign, const struct api_options *options,
               struct api_server **out, struct base_error *error)
{
    *out = NULL;
    struct api_server *api = calloc(1, sizeof *api);
    if (api == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for the server.");
    api->campaign = campaign;
    api->log = options->log;
    api->began_s = base_clock_monotonic_s();
    api->flux = flux_cache_open(FLUX_CACHE_BYTES);
    const struct http_options http = {.listen = options->listen,
                                      .threads = 2,
                                      .workers = 4,
                                      .waiting_max = 1024,
                                      .connections_max = 12000,
                                      .timeout_s = 30,
                                      .person_rate = PERSON_RATE,
                                      .person_burst = PERSON_BURST,
                                      .address_rate = ADDRESS_RATE,
                                      .address_burst = ADDRESS_BURST,
                                      .trusted_proxies = options->trusted_proxies,
                                      .tls_cert = options->tls_cert,
                                      .tls_key = options->tls_key,
                                      .routes = api_routes,
                                      .files = web_files,
                                      .file_count = web_file_count,
                                      .cookie_name = "ebbmark_session",
                                      .identify = identify,
                                      .context = api,
                                      .log = options->log};
    bool ok = (api->flux != NULL ||
               base_fail(error, BASE_MEMORY, "There is no memory for the server.")) &&
              http_start(&http, &api->http, error);
    if (!ok) {
        flux_cache_close(api->flux);
        free(api);
        return false;
    }
    *out = api;
    return true;
}

uint16_t api_port(const struct api_server *server)
{
    return http_port(server->http);
}

void api_stop(struct api_server *server, double grace_s)
{
    if (server == NULL)
        return;
    http_stop(server->http, grace_s);
    flux_cache_close(server->flux);
    free(server);
}
