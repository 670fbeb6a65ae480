#include "exchange.h"

#include <sodium.h>
#include <stdlib.h>
#include <string.h>

#include "body.h"
#include "ebbmark/clock.h"
#include "ebbmark/text.h"
#include "kept.h"
#include "server.h"

/* What one exchange may take besides its body: far above what any handler needs, so that a fault in
 * one cannot eat the machine's memory. */
#define ARENA_LIMIT (256u * 1024u * 1024u)

/* Unforeseeable, so that ids say nothing of how busy the server is. */
static void id_make(struct http_server *server, char out[17])
{
    uint64_t number = atomic_fetch_add(&server->requests_begun, 1);
    unsigned char hash[crypto_shorthash_BYTES];
    (void)crypto_shorthash(hash, (const unsigned char *)&number, sizeof number, server->id_key);
    base_text_hex(out, hash, sizeof hash);
}

struct http_exchange *http_exchange_new(struct http_server *server, const char *address)
{
    /* The target is kept twice: as sent for the log, and to be cut up. */
    size_t length = strlen(address) + 1;
    struct http_exchange *exchange = malloc(sizeof *exchange + 2 * length);
    if (exchange == NULL)
        return NULL;
    memset(exchange, 0, sizeof *exchange);
    exchange->server = server;
    (void)atomic_fetch_add(&server->holders, 1);
    atomic_store(&exchange->holders, 1);
    exchange->address = (char *)(exchange + 1);
    memcpy(exchange->address, address, length);
    memcpy(exchange->address + length, address, length);
    exchange->extra_end = &exchange->extra;
    exchange->began_s = base_clock_monotonic_s();
    id_make(server, exchange->id);
    return exchange;
}

void http_exchange_drop(struct http_exchange *exchange)
{
    if (atomic_fetch_sub(&exchange->holders, 1) != 1)
        return;
    struct http_server *server = exchange->server;
    http_kept_give_back(exchange);
    if (exchange->response != NULL)
        MHD_destroy_response(exchange->response);
    json_decref(exchange->json);
    http_body_free(exchange);
    base_arena_free(exchange->arena);
    free(exchange);
    http_server_drop(server);
}

bool http_exchange_is_answered(const struct http_exchange *exchange)
{
    return exchange->status != 0;
}

struct base_arena *http_exchange_arena(struct http_exchange *exchange)
{
    if (exchange->arena == NULL)
        exchange->arena = base_arena_new(ARENA_LIMIT);
    return exchange->arena;
}
