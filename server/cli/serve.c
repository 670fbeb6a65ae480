#include "cli.h"

#include <stdio.h>
#include <string.h>
#include <time.h>
#include <unistd.h>

#include "ebbmark/api.h"

#define GRACE_S 10.0

/* Wait for a signal, then stop: what is in flight may finish for GRACE_S. */
static void wait_for_a_signal(void)
{
    const struct timespec moment = {.tv_nsec = 200000000};
    while (cli_stop_asked == 0)
        (void)nanosleep(&moment, NULL);
}

int cli_serve(int argc, char **argv)
{
    const char *database = NULL, *listen = "127.0.0.1:8080", *cert = NULL, *key = NULL;
    const char *proxy = NULL;
    int rest;
    bool help;
    const struct cli_option options[] = {
        {"database", &database, NULL, true},    {"listen", &listen, NULL, false},
        {"tls-cert", &cert, NULL, false},       {"tls-key", &key, NULL, false},
        {"trusted-proxy", &proxy, NULL, false}, {NULL, NULL, NULL, false}};
    if (!cli_options_read(argc, argv, options, &rest, &help))
        return cli_usage("serve", help);
    if ((cert == NULL) != (key == NULL)) {
        (void)fprintf(stderr, "ebbmark: --tls-cert and --tls-key go together.\n");
        return CLI_USAGE;
    }
    struct base_error error = {0};
    struct cli_campaign opened;
    struct api_server *server = NULL;
    if (!cli_campaign_open(&opened, database, false, &error))
        return cli_fail(&error);
    opened.log.least = BASE_LOG_INFO;
    cli_signals_catch();
    const char *const proxies[] = {proxy, NULL};
    const struct api_options how = {.listen = listen,
                                    .tls_cert = cert,
                                    .tls_key = key,
                                    .trusted_proxies = proxies,
                                    .log = &opened.log};
    bool ok = api_start(opened.campaign, &how, &server, &error);
    if (ok) {
        /* The host as it was given, with the port that is really in use. */
        int host = (int)(strrchr(listen, ':') != NULL ? strrchr(listen, ':') - listen : 0);
        (void)printf("Ebbmark serves %s at %s://%.*s:%u/ (stop it with Ctrl-C).\n", database,
                     cert != NULL ? "https" : "http", host, listen, api_port(server));
        (void)fflush(stdout);
        wait_for_a_signal();
        (void)printf("Stopping: what is in flight may finish.\n");
        api_stop(server, GRACE_S);
    }
    cli_campaign_close(&opened);
    return ok ? CLI_DONE : cli_fail(&error);
}
