#include "rehearse_client.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <strings.h>
#include <time.h>

#define ANSWER_MAX (64u << 20)
#define TRIES_MAX 30
#define WAIT_MAX_S 20.0

static size_t take_body(char *data, size_t size, size_t count, void *context)
{
    struct rehearse_client *client = context;
    if (client->body.length + size * count > ANSWER_MAX)
        return 0;
    base_text_add_bytes(&client->body, data, size * count);
    return client->body.failed ? 0 : size * count;
}

static size_t take_header(char *data, size_t size, size_t count, void *context)
{
    static const char name[] = "Retry-After:";
    struct rehearse_client *client = context;
    size_t length = size * count;
    char value[32] = "";
    if (length > sizeof name - 1 && strncasecmp(data, name, sizeof name - 1) == 0) {
        size_t rest = length - (sizeof name - 1);
        if (rest >= sizeof value)
            rest = sizeof value - 1;
        memcpy(value, data + sizeof name - 1, rest);
        value[rest] = '\0';
        if (!base_text_read_number(value, &client->retry_after_s))
            client->retry_after_s = 1.0;
    }
    return length;
}

bool rehearse_client_open(struct rehearse_client *client, const char *server,
                          struct base_error *error)
{
    *client = (struct rehearse_client){.curl = curl_easy_init(), .server = server};
    if (client->curl == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for another HTTP client.");
    (void)curl_easy_setopt(client->curl, CURLOPT_COOKIEFILE, "");
    (void)curl_easy_setopt(client->curl, CURLOPT_NOSIGNAL, 1L);
    (void)curl_easy_setopt(client->curl, CURLOPT_TIMEOUT, 60L);
    (void)curl_easy_setopt(client->curl, CURLOPT_ACCEPT_ENCODING, "");
    (void)curl_easy_setopt(client->curl, CURLOPT_WRITEFUNCTION, take_body);
    (void)curl_easy_setopt(client->curl, CURLOPT_WRITEDATA, client);
    (void)curl_easy_setopt(client->curl, CURLOPT_HEADERFUNCTION, take_header);
    (void)curl_easy_setopt(client->curl, CURLOPT_HEADERDATA, client);
    return true;
}

void rehearse_client_close(struct rehearse_client *client)
{
    curl_easy_cleanup(client->curl);
    base_text_free(&client->body);
    *client = (struct rehearse_client){0};
}

static void wait_s(double seconds)
{
    double whole = floor(fmin(seconds, WAIT_MAX_S));
    struct timespec span = {.tv_sec = (time_t)whole,
                            .tv_nsec = (long)((fmin(seconds, WAIT_MAX_S) - whole) * 1e9)};
    (void)nanosleep(&span, NULL);
}

/* Add a header line; false when there is no memory. */
static bool add_header(struct curl_slist **headers, const char *line)
{
    struct curl_slist *longer = curl_slist_append(*headers, line);
    if (longer != NULL)
        *headers = longer;
    return longer != NULL;
}

/* Send once; what curl says. */
static CURLcode send_once(struct rehearse_client *client, const char *method, const char *url,
                          const char *body, struct curl_slist *headers)
{
    client->body.length = 0;
    client->status = 0;
    client->retry_after_s = 0.0;
    (void)curl_easy_setopt(client->curl, CURLOPT_URL, url);
    (void)curl_easy_setopt(client->curl, CURLOPT_HTTPHEADER, headers);
    if (strcmp(method, "GET") == 0) {
        (void)curl_easy_setopt(client->curl, CURLOPT_HTTPGET, 1L);
        (void)curl_easy_setopt(client->curl, CURLOPT_CUSTOMREQUEST, NULL);
    } else {
        (void)curl_easy_setopt(client->curl, CURLOPT_POSTFIELDSIZE, (long)strlen(body));
        (void)curl_easy_setopt(client->curl, CURLOPT_POSTFIELDS, body);
        (void)curl_easy_setopt(client->curl, CURLOPT_CUSTOMREQUEST, method);
    }
    CURLcode code = curl_easy_perform(client->curl);
    (void)curl_easy_getinfo(client->curl, CURLINFO_RESPONSE_CODE, &client->status);
    return code;
}

bool rehearse_client_send(struct rehearse_client *client, const char *method, const char *path,
                          const json_t *json, const char *key, struct base_error *error)
{
    char url[1024], key_line[256] = "";
    int wrote = snprintf(url, sizeof url, "%s%s", client->server, path);
    if (wrote < 0 || (size_t)wrote >= sizeof url)
        return base_fail(error, BASE_INVALID, "The address %s is too long.", client->server);
    char *body = json != NULL ? json_dumps(json, JSON_COMPACT) : NULL;
    struct curl_slist *headers = NULL;
    if (key != NULL)
        (void)snprintf(key_line, sizeof key_line, "Idempotency-Key: %s", key);
    bool ok = (json == NULL || body != NULL) && add_header(&headers, "Ebbmark-Request: 1") &&
              (json == NULL || add_header(&headers, "Content-Type: application/json")) &&
              (key == NULL || add_header(&headers, key_line));
    if (!ok)
        (void)base_fail(error, BASE_MEMORY, "There is no memory for a request.");
    CURLcode code = CURLE_OK;
    for (int tries = 1; ok; tries++) {
        code = send_once(client, method, url, body != NULL ? body : "", headers);
        bool busy = client->status == 429 || client->status == 503;
        if (code == CURLE_OK && !busy)
            break;
        if (tries == TRIES_MAX || code == CURLE_COULDNT_CONNECT)
            ok = base_fail(error, BASE_IO, "The server %s does not answer: %s.", client->server,
                           busy ? "it is overloaded" : curl_easy_strerror(code));
        else
            wait_s(busy ? fmax(client->retry_after_s, 0.1) : 0.2 * tries);
    }
    curl_slist_free_all(headers);
    free(body);
    return ok;
}
