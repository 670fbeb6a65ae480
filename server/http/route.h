/* Finding the route of a request. */
#ifndef HTTP_ROUTE_H
#define HTTP_ROUTE_H

#include "ebbmark/http.h"
#include "uri.h"

#define HTTP_ALLOW_SIZE 64

struct http_router;

/* Compile the NULL-ended list of tables. BASE_INTERNAL when two routes are the same or a path
 * cannot be read. The tables outlive the router. */
bool http_router_make(const struct http_route *const *tables, struct http_router **out,
                      struct base_error *error);
void http_router_free(struct http_router *router);

/* The route for a method and target, or NULL. Then `allow` names the methods that the path does
 * have ("GET, HEAD, POST"), or is empty when there is no such path. Where several paths fit, the
 * one that spells out more of its parts wins. */
const struct http_route *http_router_find(const struct http_router *router, const char *method,
                                          const struct http_target *target,
                                          char allow[HTTP_ALLOW_SIZE]);

/* Which part of the path {name} is, or -1. */
int http_route_part(const struct http_route *route, const char *name);

#endif
