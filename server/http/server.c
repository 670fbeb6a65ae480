#include "server.h"

#include <assert.h>
#include <errno.h>
#include <fcntl.h>
#include <sodium.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/resource.h>
#include <sys/stat.h>
#include <time.h>
#include <unistd.h>

#include "answer.h"
#include "ebbmark/clock.h"

/* A connection's memory in the library: half of it reads, the rest holds the answer's head. */
#define CONNECTION_MEMORY 16384
/* Files that the program opens beside its connections. */
#define OTHER_FILES 256
/* Buckets of each rate limit; 24 bytes each. */
#define LIMIT_SLOTS 65536
#define BODY_BYTES_LEAST (64u * 1024u * 1024u)
#define TLS_PRIORITIES "NORMAL:-VERS-ALL:+VERS-TLS1.3:+VERS-TLS1.2"
#define PEM_MAX (1024 * 1024)

/* ---- settings ------------------------------------------------------------------------------- */

/* What was given, with the defaults in place of zeros. */
static struct http_options with_defaults(const struct http_options *given)
{
    struct http_options options = *given;
    if (options.threads == 0)
        options.threads = 2;
    if (options.workers == 0)
        options.workers = 4;
    if (options.waiting_max == 0)
        options.waiting_max = 256;
    if (options.connections_max == 0)
        options.connections_max = 12000;
    if (options.connections_max < options.threads)
        options.connections_max = options.threads;
    if (options.timeout_s == 0)
        options.timeout_s = 30;
    if (options.cookie_name == NULL)
        options.cookie_name = "session";
    return options;
}

/* Let the process open that many connections; fewer when the system does not. */
static unsigned connections_possible(unsigned wanted, const struct base_log *log)
{
    struct rlimit limit;
    if (getrlimit(RLIMIT_NOFILE, &limit) != 0)
        return wanted;
    rlim_t need = (rlim_t)wanted + OTHER_FILES;
    if (limit.rlim_cur < need) {
        limit.rlim_cur = limit.rlim_max < need ? limit.rlim_max : need;
        (void)setrlimit(RLIMIT_NOFILE, &limit);
        if (getrlimit(RLIMIT_NOFILE, &limit) != 0)
            return wanted;
    }
    if (limit.rlim_cur >= need)
        return wanted;
    unsigned possible =
        limit.rlim_cur > 2 * OTHER_FILES ? (unsigned)limit.rlim_cur - OTHER_FILES : OTHER_FILES;
    char text[96];
    (void)snprintf(text, sizeof text,
                   "The system allows %llu open files, so at most %u connections are taken.",
                   (unsigned long long)limit.rlim_cur, possible);
    base_log_line(log, BASE_LOG_WARNING, "connections_limited", "sentence", text, NULL);
    return possible;
}

/* A PEM file as text. */
static bool pem_read(const char *path, char **out, struct base_error *error)
{
    int fd = open(path, O_RDONLY | O_CLOEXEC);
    if (fd < 0)
        return base_fail_errno(error, errno, "Opening %s", path);
    size_t used = 0;
    char *text = malloc(PEM_MAX + 1);
    bool ok = text != NULL;
    if (!ok)
        (void)base_fail(error, BASE_MEMORY, "There is no memory to read %s.", path);
    while (ok && used < PEM_MAX) {
        ssize_t got = read(fd, text + used, PEM_MAX - used);
        if (got < 0)
            ok = base_fail_errno(error, errno, "Reading %s", path);
        if (got <= 0)
            break;
        used += (size_t)got;
    }
    if (ok) {
        text[used] = '\0';
        *out = text;
    } else {
        free(text);
    }
    (void)close(fd);
    return ok;
}

static size_t largest_body(const struct http_route *const *tables)
{
    size_t largest = 0;
    for (size_t t = 0; tables != NULL && tables[t] != NULL; t++)
        for (const struct http_route *route = tables[t]; route->method != NULL; route++)
            if (route->body_limit > largest)
                largest = route->body_limit;
    return largest;
}

static bool limits_make(double rate, double burst, struct http_limits **out,
                        struct base_error *error)
{
    return rate <= 0.0 ||
           http_limits_make(rate, burst >= 1.0 ? burst : 1.0, LIMIT_SLOTS, out, error);
}

/* ---- housekeeping --------------------------------------------------------------------------- */

static void library_says(void *context, const char *format, va_list list)
    __attribute__((format(printf, 2, 0)));

static void library_says(void *context, const char *format, va_list list)
{
    const struct http_server *server = context;
    char text[512];
    (void)vsnprintf(text, sizeof text, format, list);
    text[strcspn(text, "\n")] = '\0';
    base_log_line(server->log, BASE_LOG_DEBUG, "http_library", "sentence", text, NULL);
}

static void *keep_house(void *context)
{
    struct http_server *server = context;
    while (http_connections_tend(&server->connections, 2.0 * server->timeout_s + 1.0))
        http_request_log_flush(&server->request_log);
    return NULL;
}

static bool housekeeper_start(struct http_server *server, struct base_error *error)
{
    int failed = pthread_create(&server->housekeeper, NULL, keep_house, server);
    server->housekeeper_runs = failed == 0;
    return failed == 0 || base_fail_errno(error, failed, "Starting the housekeeping thread");
}

static void housekeeper_stop(struct http_server *server)
{
    if (!server->housekeeper_runs)
        return;
    http_connections_wake_for_end(&server->connections);
    (void)pthread_join(server->housekeeper, NULL);
    server->housekeeper_runs = false;
}

/* ---- the library ---------------------------------------------------------------------------- */

/* The address stays as it was sent: this room decodes it, and refuses what cannot be. */
static size_t leave_alone(void *context, struct MHD_Connection *connection, char *text)
{
    (void)context;
    (void)connection;
    return strlen(text);
}

static void connection_changed(void *context, struct MHD_Connection *connection, void **place,
                               enum MHD_ConnectionNotificationCode what)
{
    struct http_server *server = context;
    if (what == MHD_CONNECTION_NOTIFY_CLOSED) {
        struct http_connection *line = *place;
        /* The library forgets to end a request whose address leaves it no memory. */
        if (line != NULL && line->exchange != NULL) {
            line->exchange->method = NULL; /* its text has gone already */
            http_pipeline_finish(line->exchange, true);
        }
        http_connection_closed(&server->connections, *place, base_clock_monotonic_s());
        *place = NULL;
        return;
    }
    const union MHD_ConnectionInfo *fd =
        MHD_get_connection_info(connection, MHD_CONNECTION_INFO_CONNECTION_FD);
    const union MHD_ConnectionInfo *peer =
        MHD_get_connection_info(connection, MHD_CONNECTION_INFO_CLIENT_ADDRESS);
    if (fd != NULL && peer != NULL)
        *place = http_connection_opened(&server->connections, fd->connect_fd, peer->client_addr,
                                        base_clock_monotonic_s());
}

static bool daemon_start(struct http_server *server, const struct http_options *options,
                         struct base_error *error)
{
    unsigned flags = MHD_USE_EPOLL_INTERNAL_THREAD | MHD_ALLOW_SUSPEND_RESUME | MHD_USE_ERROR_LOG;
    struct MHD_OptionItem more[5];
    size_t used = 0;
    if (options->threads > 1)
        more[used++] =
            (struct MHD_OptionItem){MHD_OPTION_THREAD_POOL_SIZE, (intptr_t)options->threads, NULL};
    if (server->is_tls) {
        flags |= MHD_USE_TLS;
        more[used++] = (struct MHD_OptionItem){MHD_OPTION_HTTPS_MEM_CERT, 0, server->tls_cert};
        more[used++] = (struct MHD_OptionItem){MHD_OPTION_HTTPS_MEM_KEY, 0, server->tls_key};
        more[used++] =
            (struct MHD_OptionItem){MHD_OPTION_HTTPS_PRIORITIES, 0, (char *)TLS_PRIORITIES};
    }
    more[used] = (struct MHD_OptionItem){MHD_OPTION_END, 0, NULL};
    server->daemon = MHD_start_daemon(
        flags, 0, NULL, NULL, http_pipeline_step, server, MHD_OPTION_EXTERNAL_LOGGER, library_says,
        server, MHD_OPTION_LISTEN_SOCKET, server->listen_fd, MHD_OPTION_CONNECTION_LIMIT,
        connections_possible(options->connections_max, server->log),
        MHD_OPTION_CONNECTION_MEMORY_LIMIT, (size_t)CONNECTION_MEMORY,
        MHD_OPTION_CONNECTION_TIMEOUT, server->timeout_s, MHD_OPTION_URI_LOG_CALLBACK,
        http_pipeline_begin, server, MHD_OPTION_UNESCAPE_CALLBACK, leave_alone, NULL,
        MHD_OPTION_NOTIFY_COMPLETED, http_pipeline_end, server, MHD_OPTION_NOTIFY_CONNECTION,
        connection_changed, server, MHD_OPTION_ARRAY, more, MHD_OPTION_END);
    if (server->daemon == NULL)
        return base_fail(error, server->is_tls ? BASE_INVALID : BASE_INTERNAL,
                         server->is_tls ? "The HTTP library does not start; do the certificate "
                                          "and the key hold PEM text and belong together?"
                                        : "The HTTP library does not start.");
    return true;
}

/* ---- start and stop ------------------------------------------------------------------------- */

static struct http_server *server_new(const struct http_options *options)
{
    struct http_server *server = calloc(1, sizeof *server);
    if (server == NULL)
        return NULL;
    atomic_store(&server->holders, 1);
    server->listen_fd = -1;
    server->log = options->log;
    server->context = options->context;
    server->timeout_s = options->timeout_s;
    server->body_bytes_max = BODY_BYTES_LEAST + 2 * largest_body(options->routes);
    randombytes_buf(server->id_key, sizeof server->id_key);
    http_connections_begin(&server->connections);
    http_request_log_begin(&server->request_log, options->log);
    return server;
}

static bool server_fill(struct http_server *server, const struct http_options *options,
                        struct base_error *error)
{
    server->cookie_name = strdup(options->cookie_name);
    server->when_failed = http_answer_last_resort("internal");
    server->when_stopping = http_answer_last_resort("stopping");
    if (server->cookie_name == NULL || server->when_failed == NULL || server->when_stopping == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for the server.");
    server->is_tls = options->tls_cert != NULL;
    if (server->is_tls && (!pem_read(options->tls_cert, &server->tls_cert, error) ||
                           !pem_read(options->tls_key, &server->tls_key, error)))
        return false;
    return http_networks_read(options->trusted_proxies, &server->proxies, error) &&
           http_router_make(options->routes, &server->router, error) &&
           http_statics_make(options->files, options->file_count, &server->statics, error) &&
           limits_make(options->person_rate, options->person_burst, &server->person_limits,
                       error) &&
           limits_make(options->address_rate, options->address_burst, &server->address_limits,
                       error) &&
           (options->identify == NULL || http_identities_make(options->identify, options->context,
                                                              &server->identities, error)) &&
           http_waiting_begin(&server->waiting, options->workers, options->waiting_max,
                              options->connections_max, error);
}

void http_server_drop(struct http_server *server)
{
    if (atomic_fetch_sub(&server->holders, 1) != 1)
        return;
    http_request_log_end(&server->request_log);
    http_connections_end(&server->connections);
    http_waiting_end(&server->waiting);
    http_identities_free(server->identities);
    http_limits_free(server->person_limits);
    http_limits_free(server->address_limits);
    http_statics_free(server->statics);
    http_router_free(server->router);
    http_networks_free(&server->proxies);
    if (server->when_failed != NULL)
        MHD_destroy_response(server->when_failed);
    if (server->when_stopping != NULL)
        MHD_destroy_response(server->when_stopping);
    free(server->tls_cert);
    free(server->tls_key);
    free(server->cookie_name);
    free(server);
}

bool http_start(const struct http_options *given, struct http_server **out,
                struct base_error *error)
{
    assert(given->listen != NULL && (given->tls_cert == NULL) == (given->tls_key == NULL));
    *out = NULL;
    if (sodium_init() < 0)
        return base_fail(error, BASE_INTERNAL, "The cryptographic library does not start.");
    const struct http_options options = with_defaults(given);
    struct http_server *server = server_new(&options);
    if (server == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for the server.");
    bool ok = server_fill(server, &options, error) &&
              http_listen(options.listen, &server->listen_fd, &server->port, error) &&
              housekeeper_start(server, error) && daemon_start(server, &options, error);
    if (!ok) {
        housekeeper_stop(server);
        if (server->listen_fd >= 0)
            (void)close(server->listen_fd);
        http_server_drop(server);
        return false;
    }
    *out = server;
    return true;
}

uint16_t http_port(const struct http_server *server)
{
    return server->port;
}

/* Wait until nothing is in flight, for at most `most_s`. */
static void wait_until_idle(const struct http_server *server, double most_s)
{
    const struct timespec moment = {.tv_nsec = 5000000};
    double until_s = base_clock_monotonic_s() + most_s;
    while (atomic_load(&server->in_flight) > 0 && base_clock_monotonic_s() < until_s)
        (void)nanosleep(&moment, NULL);
}

void http_stop(struct http_server *server, double grace_s)
{
    atomic_store(&server->stopping, true);
    int fd = MHD_quiesce_daemon(server->daemon);
    if (fd >= 0)
        (void)close(fd);
    wait_until_idle(server, grace_s);
    http_waiting_cut_off(&server->waiting);
    wait_until_idle(server, 1.0); /* those just told off still have to hear it */
    MHD_stop_daemon(server->daemon);
    housekeeper_stop(server);
    http_request_log_flush(&server->request_log);
    http_server_drop(server);
}

void http_identity_forget(struct http_server *server, int64_t person)
{
    if (server->identities != NULL)
        http_identities_forget(server->identities, person);
}

void http_count(struct http_server *server, struct http_counts *out)
{
    *out = (struct http_counts){.connections = http_connections_count(&server->connections),
                                .in_flight = atomic_load(&server->in_flight)};
    for (size_t i = 0; i < 6; i++)
        out->answers[i] = atomic_load(&server->answers[i]);
    (void)pthread_mutex_lock(&server->waiting.lock);
    out->waiting = server->waiting.queued;
    (void)pthread_mutex_unlock(&server->waiting.lock);
}
