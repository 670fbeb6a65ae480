/*
 * The two hot paths of the interface, whole: the flux of a leased segment against bare
 * libmicrohttpd with a constant body of that size, and reviews taken over HTTP by 256 clients,
 * durable, against the store's own rate without HTTP. One run on one machine; prints a table and
 * changes nothing.
 *
 *     interface [FOLDER]      FOLDER on the disk to measure, default /tmp; run at the top of the
 * source
 */
#include <arpa/inet.h>
#include <microhttpd.h>
#include <sodium.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/epoll.h>
#include <sys/mman.h>
#include <sys/prctl.h>
#include <sys/resource.h>
#include <sys/wait.h>
#include <unistd.h>

#include "ebbmark/api.h"
#include "ebbmark/clock.h"

#define FLUX_CLIENTS 64
#define TURNS 11
#define TURN_S 0.5
#define REVIEW_CLIENTS 256
#define REVIEWS_EACH 60
#define GROUP 100 /* reviews a transaction, of the store alone */
#define ALONE 300 /* reviews stored in a transaction each */
#define ANSWER_MOST (1u << 20)
#define REQUEST_MOST 1024

static struct base_error error;

static void give_up(const char *what)
{
    (void)fprintf(stderr, "interface: %s: %s\n", what, error.sentence);
    exit(1);
}

/* ---- the client, in a process of its own ---------------------------------------------------- */

struct talk {
    int fd;
    char *answer;
    size_t got, whole; /* of the answer; whole is 0 until its head is here */
    unsigned sent;     /* requests so far */
};

/* One round of requests, in memory that both processes see. */
struct round {
    uint16_t port;
    unsigned clients, each; /* each 0: the same request over and over, for TURN_S */
    char (*requests)[REQUEST_MOST];
    uint64_t answers, refused;
    double seconds;
};

static void ask(struct talk *talk, const char *request)
{
    size_t size = strlen(request);
    if (send(talk->fd, request, size, MSG_NOSIGNAL) != (ssize_t)size)
        give_up("send");
    talk->sent++;
    talk->got = talk->whole = 0;
}

static void dial(struct talk *talk, uint16_t port)
{
    const struct sockaddr_in address = {
        .sin_family = AF_INET, .sin_port = htons(port), .sin_addr.s_addr = htonl(INADDR_LOOPBACK)};
    talk->fd = socket(AF_INET, SOCK_STREAM, 0);
    talk->answer = malloc(ANSWER_MOST);
    if (talk->fd < 0 || talk->answer == NULL ||
        connect(talk->fd, (const struct sockaddr *)&address, sizeof address) != 0)
        give_up("connect");
}

/* Read what is there; true when the answer is complete. */
static bool listen_on(struct talk *talk)
{
    ssize_t got = recv(talk->fd, talk->answer + talk->got, ANSWER_MOST - talk->got, 0);
    if (got <= 0)
        give_up("recv");
    talk->got += (size_t)got;
    if (talk->whole == 0) {
        const char *end = memmem(talk->answer, talk->got, "\r\n\r\n", 4);
        const char *length = memmem(talk->answer, talk->got, "Content-Length: ", 16);
        if (end != NULL && length != NULL)
            talk->whole = (size_t)(end + 4 - talk->answer) + strtoul(length + 16, NULL, 10);
    }
    return talk->whole != 0 && talk->got == talk->whole;
}

static void work(struct round *round)
{
    struct talk *talks = calloc(round->clients, sizeof *talks);
    int poll = epoll_create1(0);
    if (talks == NULL || poll < 0)
        give_up("the client");
    for (unsigned i = 0; i < round->clients; i++) {
        struct epoll_event event = {.events = EPOLLIN, .data.u32 = i};
        dial(&talks[i], round->port);
        if (epoll_ctl(poll, EPOLL_CTL_ADD, talks[i].fd, &event) != 0)
            give_up("epoll_ctl");
    }
    double began = base_clock_monotonic_s(), now = began;
    for (unsigned i = 0; i < round->clients; i++)
        ask(&talks[i], round->requests[round->each == 0 ? i : i * round->each]);
    uint64_t wanted = round->each == 0 ? UINT64_MAX : (uint64_t)round->clients * round->each;
    while (round->answers < wanted && now - began < (round->each == 0 ? TURN_S : 120.0)) {
        struct epoll_event events[64];
        int ready = epoll_wait(poll, events, 64, 1000);
        for (int k = 0; k < ready; k++) {
            unsigned i = events[k].data.u32;
            struct talk *talk = &talks[i];
            if (!listen_on(talk))
                continue;
            round->answers++;
            round->refused += strncmp(talk->answer, "HTTP/1.1 20", 11) == 0 ? 0 : 1;
            if (round->each == 0)
                ask(talk, round->requests[i]);
            else if (talk->sent < round->each)
                ask(talk, round->requests[i * round->each + talk->sent]);
        }
        now = base_clock_monotonic_s();
    }
    round->seconds = now - began;
}

/* This process's processor time; the servers and the store run in it, the client does not. */
static double processor_s(void)
{
    struct rusage usage;
    (void)getrusage(RUSAGE_SELF, &usage);
    return (double)(usage.ru_utime.tv_sec + usage.ru_stime.tv_sec) +
           1e-6 * (double)(usage.ru_utime.tv_usec + usage.ru_stime.tv_usec);
}

/* What a client sees, which wavers on a busy machine; and microseconds of processor time for one,
 * which waver less. */
struct speed {
    double per_second, microseconds;
};

/* Let another process send a round. */
static struct speed send_round(struct round *shared, struct round round)
{
    *shared = round;
    double before_s = processor_s();
    pid_t child = fork();
    if (child == 0) {
        (void)prctl(PR_SET_PDEATHSIG, SIGKILL);
        work(shared);
        _exit(0);
    }
    int status = 1;
    if (child < 0 || waitpid(child, &status, 0) != child || status != 0)
        give_up("the client process");
    if (shared->refused > 0) {
        (void)fprintf(stderr, "interface: %lu answers were refusals\n",
                      (unsigned long)shared->refused);
        exit(1);
    }
    return (struct speed){(double)shared->answers / shared->seconds,
                          1e6 * (processor_s() - before_s) / (double)shared->answers};
}

/* ---- the campaign --------------------------------------------------------------------------- */

struct stage {
    char folder[256], database[300];
    struct store *store;
    struct campaign *campaign;
    struct api_server *server;
    struct base_arena *arena;
    struct base_log log;
    struct round *shared;
    char (*requests)[REQUEST_MOST];
};

static void *shared_memory(size_t size)
{
    void *memory = mmap(NULL, size, PROT_READ | PROT_WRITE, MAP_SHARED | MAP_ANONYMOUS, -1, 0);
    if (memory == MAP_FAILED)
        give_up("memory");
    return memory;
}

static void open_stage(struct stage *stage, const char *folder)
{
    static const char *const paths[] = {"demo-data/light-curves"};
    const struct store_options options = {.readers = 8};
    struct campaign_load_progress loaded;
    const struct campaign_load_options what = {.batch = "Reedbed", .paths = paths, .path_count = 1};
    (void)snprintf(stage->folder, sizeof stage->folder, "%s/ebbmark-interface-XXXXXX", folder);
    if (mkdtemp(stage->folder) == NULL)
        give_up(stage->folder);
    (void)snprintf(stage->database, sizeof stage->database, "%s/c.db", stage->folder);
    FILE *log = tmpfile();
    stage->log = (struct base_log){.fd = log == NULL ? -1 : fileno(log), .least = BASE_LOG_INFO};
    stage->arena = base_arena_new(0);
    stage->shared = shared_memory(sizeof *stage->shared);
    stage->requests = shared_memory((size_t)REVIEW_CLIENTS * REVIEWS_EACH * REQUEST_MOST);
    const struct api_options how = {
        .listen = "127.0.0.1:0", .person_rate = -1.0, .address_rate = -1.0, .log = &stage->log};
    if (!store_open(stage->database, &options, &stage->store, &error) ||
        !campaign_open(stage->store, NULL, &stage->log, &stage->campaign, &error) ||
        !campaign_load(stage->campaign, &what, &loaded, &error) ||
        !campaign_setting_change(stage->campaign, "looks_most", "1000", 0, &error) ||
        !campaign_setting_change(stage->campaign, "lease_minutes", "1440", 0, &error) ||
        !campaign_setting_change(stage->campaign, "run_after_reviews", "0", 0, &error) ||
        !campaign_setting_change(stage->campaign, "run_after_minutes", "0", 0, &error) ||
        !api_start(stage->campaign, &how, &stage->server, &error))
        give_up("the campaign");
}

static void close_stage(struct stage *stage)
{
    char command[400];
    api_stop(stage->server, 1.0);
    campaign_close(stage->campaign);
    store_close(stage->store);
    base_arena_free(stage->arena);
    (void)snprintf(command, sizeof command, "rm -rf '%s'", stage->folder);
    if (system(command) != 0)
        give_up(command);
}

/* A guest with a session's secret. */
static int64_t join(struct stage *stage, char secret[CAMPAIGN_SECRET_SIZE])
{
    struct store_person person;
    if (!campaign_join(stage->campaign, NULL, NULL, stage->arena, &person, &error) ||
        !campaign_access_give(stage->campaign, STORE_SESSION, person.id, STORE_REVIEWER, 1.0,
                              secret, &error))
        give_up("joining");
    return person.id;
}

static bool lease(struct stage *stage, int64_t person, struct campaign_lease *out)
{
    bool found;
    if (!campaign_lease_take(stage->campaign, stage->arena, person, out, &found, &error))
        give_up("a lease");
    return found;
}

/* ---- flux ----------------------------------------------------------------------------------- */

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

static int by_size(const void *a, const void *b)
{
    double left = *(const double *)a, right = *(const double *)b;
    return left < right ? -1 : left > right;
}

static void measure_flux(struct stage *stage)
{
    char secret[CAMPAIGN_SECRET_SIZE];
    struct campaign_lease held;
    for (unsigned i = 0; i < FLUX_CLIENTS; i++) {
        if (!lease(stage, join(stage, secret), &held))
            give_up("no segment is left");
        (void)snprintf(stage->requests[i], REQUEST_MOST,
                       "GET /api/v1/segments/%s/flux HTTP/1.1\r\nHost: localhost\r\n"
                       "Accept: */*\r\nCookie: ebbmark_session=%s\r\n\r\n",
                       held.segment.public_id, secret);
    }
    size_t size = 32 + 8 * held.segment.count;
    unsigned char *body = calloc(1, size);
    struct MHD_Response *constant =
        MHD_create_response_from_buffer(size, body, MHD_RESPMEM_MUST_FREE);
    struct MHD_Daemon *bare =
        MHD_start_daemon(MHD_USE_EPOLL_INTERNAL_THREAD, 0, NULL, NULL, bare_step, constant,
                         MHD_OPTION_THREAD_POOL_SIZE, 2u, MHD_OPTION_END);
    if (body == NULL || constant == NULL || bare == NULL)
        give_up("bare libmicrohttpd");
    struct round ours = {api_port(stage->server), FLUX_CLIENTS, 0, stage->requests, 0, 0, 0.0};
    struct round theirs = ours;
    theirs.port = MHD_get_daemon_info(bare, MHD_DAEMON_INFO_BIND_PORT)->port;
    double ratios[TURNS], times[TURNS], rates[TURNS];
    (void)send_round(stage->shared, ours); /* so that all are kept */
    for (int i = 0; i < TURNS; i++) {
        struct speed one = send_round(stage->shared, theirs);
        struct speed two = send_round(stage->shared, ours);
        rates[i] = two.per_second;
        ratios[i] = two.per_second / one.per_second;
        times[i] = one.microseconds / two.microseconds;
    }
    qsort(ratios, TURNS, sizeof ratios[0], by_size);
    qsort(times, TURNS, sizeof times[0], by_size);
    qsort(rates, TURNS, sizeof rates[0], by_size);
    (void)printf("%-58s %10.2f %9s%.1f\n", "flux, leased and signed in, against bare libmicrohttpd",
                 ratios[TURNS / 2], ">= ", 0.8);
    (void)printf("%-58s %10.2f %9s%.1f\n", "the same by processor time", times[TURNS / 2],
                 ">= ", 0.8);
    (void)printf("  (%zu bytes, %d clients, %.0f a second; ratios from %.2f to %.2f)\n", size,
                 FLUX_CLIENTS, rates[TURNS / 2], ratios[0], ratios[TURNS - 1]);
    MHD_stop_daemon(bare);
    MHD_destroy_response(constant);
}

/* ---- reviews -------------------------------------------------------------------------------- */

/* Leases of many people, each with a review to send; none, one or two marks in turn. */
static unsigned write_reviews(struct stage *stage)
{
    unsigned written = 0;
    for (unsigned i = 0; i < REVIEW_CLIENTS; i++) {
        char secret[CAMPAIGN_SECRET_SIZE];
        int64_t person = join(stage, secret);
        for (unsigned k = 0; k < REVIEWS_EACH; k++) {
            struct campaign_lease held;
            char body[600], marks[300] = "";
            if (!lease(stage, person, &held))
                give_up("no segment is left");
            double starts = held.segment.starts_d + 1.0;
            for (unsigned m = 0; m < written % 3; m++) {
                size_t used = strlen(marks);
                (void)snprintf(marks + used, sizeof marks - used,
                               "%s{\"starts\":%.5f,\"ends\":%.5f,\"low\":0.99,\"high\":1.0}",
                               m > 0 ? "," : "", starts + m, starts + m + 0.25);
            }
            (void)snprintf(body, sizeof body,
                           "{\"lease\":\"%s\",\"marks\":[%s],\"conditions\":[],\"seconds\":9.5}",
                           held.text, marks);
            (void)snprintf(stage->requests[written], REQUEST_MOST,
                           "POST /api/v1/reviews HTTP/1.1\r\nHost: localhost\r\n"
                           "Cookie: ebbmark_session=%s\r\nEbbmark-Request: 1\r\n"
                           "Content-Type: application/json\r\nIdempotency-Key: bench-%u\r\n"
                           "Content-Length: %zu\r\n\r\n%s",
                           secret, written, strlen(body), body);
            written++;
        }
    }
    return written;
}

/* The store's own rate, `group` reviews a transaction; into the same database, after HTTP's. */
static struct speed store_rate(struct stage *stage, unsigned count, unsigned group)
{
    struct store_review_new *reviews = calloc(group, sizeof *reviews);
    struct store_review_new **pointers = calloc(group, sizeof *pointers);
    char(*keys)[64] = calloc(group, sizeof *keys);
    struct store_mark marks[2];
    char secret[CAMPAIGN_SECRET_SIZE];
    int64_t person = join(stage, secret);
    if (reviews == NULL || pointers == NULL || keys == NULL)
        give_up("memory");
    for (unsigned m = 0; m < 2; m++)
        marks[m] = (struct store_mark){
            .starts_d = 1.0 + m, .ends_d = 1.25 + m, .low = 0.99, .high = 1.0, .sure = true};
    double before_s = processor_s(), began = base_clock_monotonic_s();
    for (unsigned at = 0; at < count; at += group) {
        for (unsigned i = 0; i < group; i++) {
            (void)snprintf(keys[i], sizeof keys[i], "store-%u-%u", group, at + i);
            reviews[i] = (struct store_review_new){.person = person,
                                                   .segment = 1 + (at + i) % 60,
                                                   .key = keys[i],
                                                   .submitted_ms = 1,
                                                   .marks = marks,
                                                   .mark_count = (at + i) % 3};
            randombytes_buf(reviews[i].lease, sizeof reviews[i].lease);
            pointers[i] = &reviews[i];
        }
        if (!store_reviews_add(stage->store, pointers, group, &error))
            give_up("the store");
    }
    double seconds = base_clock_monotonic_s() - began;
    free(keys);
    free(pointers);
    free(reviews);
    return (struct speed){count / seconds, 1e6 * (processor_s() - before_s) / count};
}

static void measure_reviews(struct stage *stage)
{
    unsigned count = write_reviews(stage);
    struct campaign_figures before = campaign_figures_now(stage->campaign);
    struct speed alone = store_rate(stage, ALONE, 1);
    struct speed grouped = store_rate(stage, count - count % GROUP, GROUP);
    struct speed rate =
        send_round(stage->shared, (struct round){api_port(stage->server), REVIEW_CLIENTS,
                                                 REVIEWS_EACH, stage->requests, 0, 0, 0});
    struct campaign_figures after = campaign_figures_now(stage->campaign);
    uint64_t taken = after.reviews_taken - before.reviews_taken;
    if (taken != count)
        give_up("not every review was taken");
    (void)printf("%-58s %10.2f %9s%.1f\n",
                 "reviews over HTTP, durable, against the store, 100 a time",
                 rate.per_second / grouped.per_second, ">= ", 0.5);
    (void)printf("%-58s %10.2f %9s%.1f\n", "the same against the store, one at a time",
                 rate.per_second / alone.per_second, ">= ", 3.0);
    (void)printf(
        "  (%u reviews, %d clients, %.0f a second, %.0f a transaction; the store alone %.0f, "
        "one at a time %.0f)\n",
        count, REVIEW_CLIENTS, rate.per_second,
        (double)taken / (double)(after.review_groups - before.review_groups), grouped.per_second,
        alone.per_second);
    (void)printf("  (processor time of one: %.1f us over HTTP, %.1f us of the store alone)\n",
                 rate.microseconds, grouped.microseconds);
}

int main(int argc, char **argv)
{
    struct stage stage = {0};
    struct rlimit files;
    if (getrlimit(RLIMIT_NOFILE, &files) == 0) {
        files.rlim_cur = files.rlim_max;
        (void)setrlimit(RLIMIT_NOFILE, &files);
    }
    (void)setvbuf(stdout, NULL, _IOLBF, 0);
    open_stage(&stage, argc > 1 ? argv[1] : "/tmp");
    (void)printf("%-58s %10s %10s\n", "", "measured", "wanted");
    measure_flux(&stage);
    measure_reviews(&stage);
    close_stage(&stage);
    return 0;
}
