/*
 * Fuzz target: the headers that this program reads itself: cookies, tokens, content negotiation,
 * ETags and forwarded addresses.
 *   make build/fuzz/cookie && build/fuzz/cookie
 */
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

#include "../../server/http/accept.h"
#include "../../server/http/cookie.h"
#include "../../server/http/proxy.h"

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

/* A secret that was found lies within the header and is a token of bounded length. */
static void check_secret(const char *header, const char *secret, size_t length)
{
    if (secret < header || secret + length > header + strlen(header) || length == 0 ||
        length > HTTP_SECRET_MAX)
        __builtin_trap();
    for (size_t i = 0; i < length; i++)
        if (secret[i] <= ' ' || secret[i] == ';')
            __builtin_trap();
}

static void check_address(const char *header)
{
    /* Every second IPv4 address is a trusted proxy, so that the whole header is walked. */
    struct http_network network = {.base.bytes = {[10] = 0xff, [11] = 0xff}, .bits = 97};
    const struct http_networks trusted = {&network, 1};
    struct http_ip peer = network.base, again;
    char text[HTTP_IP_SIZE];
    struct http_ip client = http_client_ip(&trusted, &peer, header);
    (void)http_ip_write(&client, text);
    if (!http_ip_read(text, strlen(text), &again) || memcmp(&again, &client, sizeof again) != 0)
        __builtin_trap();
}

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size)
{
    static const char *const types[] = {"application/json", "text/csv"};
    char *header = malloc(size + 1);
    const char *secret;
    size_t length;
    if (header == NULL)
        return 0;
    memcpy(header, data, size);
    header[size] = '\0';
    if (http_cookie_find(header, "session", &secret, &length))
        check_secret(header, secret, length);
    if (http_bearer_find(header, &secret, &length))
        check_secret(header, secret, length);
    int picked = http_accept_pick(header, types, 2);
    if (picked < -1 || picked > 1)
        __builtin_trap();
    (void)http_accept_gzip(header);
    (void)http_etag_is_listed(header, "\"a\"");
    check_address(header);
    free(header);
    return 0;
}
