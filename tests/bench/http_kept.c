/*
 * How fast a kept body is answered to somebody signed in, against bare libmicrohttpd with a
 * constant body of the same size, in one run on one machine; and what ten thousand open connections
 * cost. Prints a table and changes nothing.
 */
#include <arpa/inet.h>
#include <errno.h>
#include <microhttpd.h>
#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/epoll.h>
#include <sys/prctl.h>
#include <sys/resource.h>
#include <sys/wait.h>
#include <unistd.h>

#include "ebbmark/clock.h"
#include "ebbmark/http.h"

#define BODY_SIZE 6144
#define CLIENTS 64
#define THREADS                                                                                    \
    1 /* and one of the client, so that each has a processor of its own on a small machine */
#define TURNS 21 /* short ones, so that a neighbour slows both alike */
#define TURN_S 0.4
#define IDLE_CONNECTIONS 10000
#define RATIO_WANTED 0.8
#define MEGABYTES_WANTED 300.0

static void give_up(const char *what)
{
    perror(what);
    exit(1);
}

/* ---- the client, in a process of its own ------------------------------------------------------
 */

struct order {
    uint16_t port;
    unsigned connections;
    double seconds; /* 0: one request each, then hold them open until told to go on */
};

struct outcome {
    uint64_t answers;
    double seconds;
};

static const char request[] = "GET /flux HTTP/1.1\r\nHost: localhost\r\n"
                              "Cookie: ebbmark_session=a-secret-of-some-length-0123456789\r\n\r\n";

static int dial(uint16_t port)
{
    const struct sockaddr_in address = {
        .sin_family = AF_INET, .sin_port = htons(port), .sin_addr.s_addr = htonl(INADDR_LOOPBACK)};
    int fd = socket(AF_INET, SOCK_STREAM, 0);
    if (fd < 0 || connect(fd, (const struct sockaddr *)&address, sizeof address) != 0)
        give_up("connect");
    return fd;
}

static void ask(int fd)
{
    if (send(fd, request, sizeof request - 1, MSG_NOSIGNAL) != (ssize_t)(sizeof request - 1))
        give_up("send");
}

/* Bytes of a whole answer, of which `data` is the start; 0 when its head is not complete. */
static size_t answer_size(const char *data, size_t size)
{
    const char *end = memmem(data, size, "\r\n\r\n", 4);
    const char *length = memmem(data, size, "Content-Length: ", 16);
    if (end == NULL || length == NULL || strncmp(data, "HTTP/1.1 200", 12) != 0) {
        if (end != NULL)
            give_up("an answer that is not 200");
        return 0;
    }
    return (size_t)(end + 4 - data) + strtoul(length + 16, NULL, 10);
}

struct conversation {
    int fd;
    size_t got, whole; /* of the answer; whole is 0 until its head is here */
    char answer[2 * BODY_SIZE];
};

/* Read what is there; true when the answer is complete. */
static bool listen_on(struct conversation *one)
{
    ssize_t got = recv(one->fd, one->answer + one->got, sizeof one->answer - one->got, 0);
    if (got <= 0)
        give_up("recv");
    one->got += (size_t)got;
    if (one->whole == 0)
        one->whole = answer_size(one->answer, one->got);
    return one->whole != 0 && one->got == one->whole;
}

static struct outcome work(const struct order *order)
{
    int poll = epoll_create1(0);
    struct conversation *all = calloc(order->connections, sizeof *all);
    if (poll < 0 || all == NULL)
        give_up("client");
    for (unsigned i = 0; i < order->connections; i++) {
        struct epoll_event event = {.events = EPOLLIN, .data.ptr = &all[i]};
        all[i].fd = dial(order->port);
        if (epoll_ctl(poll, EPOLL_CTL_ADD, all[i].fd, &event) != 0)
            give_up("epoll_ctl");
        ask(all[i].fd);
    }
    struct outcome outcome = {0};
    double began = base_clock_monotonic_s(), now = began;
    do {
        struct epoll_event events[64];
        int ready = epoll_wait(poll, events, 64, 1000);
        for (int i = 0; i < ready; i++) {
            struct conversation *one = events[i].data.ptr;
            if (!listen_on(one))
                continue;
            outcome.answers++;
            one->got = one->whole = 0;
            if (order->seconds > 0.0)
                ask(one->fd);
        }
        now = base_clock_monotonic_s();
    } while (order->seconds > 0.0 ? now - began < order->seconds
                                  : outcome.answers < order->connections && now - began < 60.0);
    outcome.seconds = now - began;
    free(all);
    (void)close(poll);
    return outcome;
}

/* Carry out orders until there are no more. Connections of an order are closed when the next one
 * comes, so that they can be held. */
static void be_client(int orders, int outcomes)
{
    struct order order;
    while (read(orders, &order, sizeof order) == sizeof order) {
        pid_t child = fork();
        if (child == 0) {
            struct outcome outcome = work(&order);
            if (write(outcomes, &outcome, sizeof outcome) != sizeof outcome)
                exit(1);
            if (order.seconds <= 0.0)
                (void)sleep(3);
            exit(0);
        }
        int status;
        if (child < 0 || waitpid(child, &status, 0) != child || status != 0)
            exit(1);
    }
    exit(0);
}

static struct outcome place(int orders, int outcomes, struct order order)
{
    struct outcome outcome;
    if (write(orders, &order, sizeof order) != sizeof order ||
        read(outcomes, &outcome, sizeof outcome) != sizeof outcome)
        give_up("the client process");
    return outcome;
}

/* ---- the two servers --------------------------------------------------------------------------
 */

static unsigned char body[BODY_SIZE];

static enum MHD_Result bare_step(void *context, struct MHD_Connection *connection, const char *url,
                                 const char *method, const char *version, const char *data,
                                 size_t *size, void **seen)
{
    (void)url, (void)method, (void)version, (void)data, (void)size;
    if (*seen == NULL) {
        *seen = context;
        return MHD_YES;
    }
    return MHD_queue_response(connection, MHD_HTTP_OK, context);
}

static bool everybody(void *context, const char *secret, bool is_token, struct http_identity *out)
{
    (void)context, (void)secret, (void)is_token;
    *out = (struct http_identity){.person = 7, .role = HTTP_REVIEWER};
    return true;
}

static enum http_result flux(struct http_exchange *exchange, void *context)
{
    return http_answer_kept(exchange, context);
}

static const struct http_route table[] = {{"GET", "/flux", HTTP_REVIEWER, 0, 0, flux}, {0}};
static const struct http_route *const tables[] = {table, NULL};

static double resident_megabytes(void)
{
    unsigned long pages = 0, resident = 0;
    FILE *file = fopen("/proc/self/statm", "r");
    if (file == NULL || fscanf(file, "%lu %lu", &pages, &resident) != 2)
        give_up("/proc/self/statm");
    (void)fclose(file);
    return (double)resident * (double)sysconf(_SC_PAGESIZE) / 1e6;
}

static int by_size(const void *a, const void *b)
{
    double left = *(const double *)a, right = *(const double *)b;
    return left < right ? -1 : left > right;
}

/* This process's processor time; both servers run in it, the client does not. */
static double processor_s(void)
{
    struct rusage usage;
    (void)getrusage(RUSAGE_SELF, &usage);
    return (double)(usage.ru_utime.tv_sec + usage.ru_stime.tv_sec) +
           1e-6 * (double)(usage.ru_utime.tv_usec + usage.ru_stime.tv_usec);
}

struct speed {
    double per_second, microseconds; /* answers; of processor time an answer */
};

static struct speed turn(int orders, int outcomes, uint16_t port)
{
    double before_s = processor_s();
    struct outcome got = place(orders, outcomes, (struct order){port, CLIENTS, TURN_S});
    return (struct speed){(double)got.answers / got.seconds,
                          1e6 * (processor_s() - before_s) / (double)got.answers};
}

/* The middle of TURNS ratios, each of two turns that follow each other. Answers a second are what a
 * client sees, but on a busy machine they waver; the processor time of an answer wavers less. */
static struct speed measure_ratios(int orders, int outcomes, uint16_t bare, uint16_t ours)
{
    double rates[TURNS], times[TURNS];
    for (int i = 0; i < TURNS; i++) {
        struct speed one = turn(orders, outcomes, bare), two = turn(orders, outcomes, ours);
        rates[i] = two.per_second / one.per_second;
        times[i] = one.microseconds / two.microseconds;
    }
    qsort(rates, TURNS, sizeof rates[0], by_size);
    qsort(times, TURNS, sizeof times[0], by_size);
    (void)printf("  %d pairs of turns; ratios of answers a second from %.2f to %.2f\n", TURNS,
                 rates[0], rates[TURNS - 1]);
    return (struct speed){rates[TURNS / 2], times[TURNS / 2]};
}

int main(void)
{
    int orders[2], outcomes[2];
    struct rlimit files = {0};
    if (getrlimit(RLIMIT_NOFILE, &files) == 0) {
        files.rlim_cur = files.rlim_max;
        (void)setrlimit(RLIMIT_NOFILE, &files);
    }
    if (pipe(orders) != 0 || pipe(outcomes) != 0)
        give_up("pipe");
    (void)setvbuf(stdout, NULL, _IOLBF, 0);
    pid_t client = fork();
    if (client == 0) {
        (void)prctl(PR_SET_PDEATHSIG, SIGKILL);
        (void)close(orders[1]);
        be_client(orders[0], outcomes[1]);
    }
    (void)close(orders[0]);
    (void)close(outcomes[1]);

    for (size_t i = 0; i < BODY_SIZE; i++)
        body[i] = (unsigned char)(i * 2654435761u >> 11);
    FILE *log_file = tmpfile();
    const struct base_log log = {.fd = log_file == NULL ? -1 : fileno(log_file),
                                 .least = BASE_LOG_INFO};
    struct MHD_Response *constant =
        MHD_create_response_from_buffer(BODY_SIZE, body, MHD_RESPMEM_PERSISTENT);
    struct MHD_Daemon *bare =
        MHD_start_daemon(MHD_USE_EPOLL_INTERNAL_THREAD, 0, NULL, NULL, bare_step, constant,
                         MHD_OPTION_THREAD_POOL_SIZE, (unsigned)THREADS,
                         MHD_OPTION_CONNECTION_LIMIT, 12000u, MHD_OPTION_END);
    struct http_kept_body *kept = http_kept_make("application/vnd.ebbmark.flux", body, BODY_SIZE,
                                                 "\"5f3a\"", "private, max-age=86400, immutable");
    struct base_error error;
    struct http_server *server;
    const struct http_options options = {.listen = "127.0.0.1:0",
                                         .threads = THREADS,
                                         .timeout_s = 120,
                                         .person_rate = 1e9,
                                         .person_burst = 1e9,
                                         .routes = tables,
                                         .cookie_name = "ebbmark_session",
                                         .identify = everybody,
                                         .context = kept,
                                         .log = &log};
    if (bare == NULL || constant == NULL || kept == NULL || !http_start(&options, &server, &error))
        give_up("starting the servers");
    uint16_t bare_port = MHD_get_daemon_info(bare, MHD_DAEMON_INFO_BIND_PORT)->port;

    (void)printf("A kept body of %d bytes, signed in, logged; %d clients, %d server thread.\n",
                 BODY_SIZE, CLIENTS, THREADS);
    struct speed ratio = measure_ratios(orders[1], outcomes[0], bare_port, http_port(server));
    double before = resident_megabytes();
    struct outcome held =
        place(orders[1], outcomes[0], (struct order){http_port(server), IDLE_CONNECTIONS, 0.0});
    struct http_counts counts;
    http_count(server, &counts);
    double during = resident_megabytes();
    (void)printf("%-52s %10s %10s\n", "", "measured", "wanted");
    (void)printf("%-52s %10.3f %9s%.1f\n", "kept body, answers a second against bare",
                 ratio.per_second, ">= ", RATIO_WANTED);
    (void)printf("%-52s %10.3f %9s%.1f\n", "the same by processor time", ratio.microseconds,
                 ">= ", RATIO_WANTED);
    (void)printf("%-52s %7.0f MB %6s%.0f MB\n", "resident with 10,000 open connections", during,
                 "< ", MEGABYTES_WANTED);
    (void)printf("  (%zu were open, each after one answer; %.0f MB before them)\n",
                 counts.connections, before);
    (void)close(orders[1]);
    (void)waitpid(client, NULL, 0);
    http_stop(server, 1.0);
    MHD_stop_daemon(bare);
    MHD_destroy_response(constant);
    http_kept_drop(kept);
    if (log_file != NULL)
        (void)fclose(log_file);
    return held.answers == IDLE_CONNECTIONS && ratio.per_second >= RATIO_WANTED &&
                   during < MEGABYTES_WANTED
               ? 0
               : 1;
}
