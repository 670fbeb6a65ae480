#include "route.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

struct pattern {
    const struct http_route *route;
    char *text;                        /* the path, its slashes replaced by NULs */
    const char *parts[HTTP_PARTS_MAX]; /* NULL: any text that is not empty */
    size_t count, spelled_out;
};

struct http_router {
    size_t count;
    struct pattern patterns[]; /* those that spell out more come first */
};

static bool pattern_make(const struct http_route *route, struct pattern *out,
                         struct base_error *error)
{
    *out = (struct pattern){.route = route};
    if (route->path[0] != '/')
        return base_fail(error, BASE_INTERNAL, "The route %s does not start with a slash.",
                         route->path);
    out->text = strdup(route->path);
    if (out->text == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for the routes.");
    char *rest = NULL;
    for (char *part = strtok_r(out->text, "/", &rest); part != NULL;
         part = strtok_r(NULL, "/", &rest)) {
        if (out->count == HTTP_PARTS_MAX)
            return base_fail(error, BASE_INTERNAL, "The route %s has too many parts.", route->path);
        bool named = part[0] == '{';
        out->parts[out->count++] = named ? NULL : part;
        out->spelled_out += named ? 0 : 1;
    }
    return true;
}

static bool same_path(const struct pattern *a, const struct pattern *b)
{
    if (a->count != b->count)
        return false;
    for (size_t i = 0; i < a->count; i++) {
        if ((a->parts[i] == NULL) != (b->parts[i] == NULL))
            return false;
        if (a->parts[i] != NULL && strcmp(a->parts[i], b->parts[i]) != 0)
            return false;
    }
    return true;
}

static bool check_distinct(const struct http_router *router, struct base_error *error)
{
    for (size_t i = 0; i < router->count; i++)
        for (size_t j = i + 1; j < router->count; j++) {
            const struct pattern *a = &router->patterns[i], *b = &router->patterns[j];
            if (strcmp(a->route->method, b->route->method) == 0 && same_path(a, b))
                return base_fail(error, BASE_INTERNAL, "The routes %s and %s of %s are the same.",
                                 a->route->path, b->route->path, a->route->method);
        }
    return true;
}

static int by_spelled_out(const void *left, const void *right)
{
    const struct pattern *a = left, *b = right;
    return a->spelled_out < b->spelled_out ? 1 : a->spelled_out > b->spelled_out ? -1 : 0;
}

bool http_router_make(const struct http_route *const *tables, struct http_router **out,
                      struct base_error *error)
{
    size_t count = 0;
    for (size_t t = 0; tables != NULL && tables[t] != NULL; t++)
        for (const struct http_route *route = tables[t]; route->method != NULL; route++)
            count++;
    struct http_router *router = calloc(1, sizeof *router + count * sizeof(struct pattern));
    if (router == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory for the routes.");
    bool ok = true;
    for (size_t t = 0; ok && tables != NULL && tables[t] != NULL; t++)
        for (const struct http_route *route = tables[t]; ok && route->method != NULL; route++)
            ok = pattern_make(route, &router->patterns[router->count++], error);
    if (ok)
        ok = check_distinct(router, error);
    if (ok)
        qsort(router->patterns, router->count, sizeof(struct pattern), by_spelled_out);
    else
        http_router_free(router);
    *out = ok ? router : NULL;
    return ok;
}

void http_router_free(struct http_router *router)
{
    if (router == NULL)
        return;
    for (size_t i = 0; i < router->count; i++)
        free(router->patterns[i].text);
    free(router);
}

static bool fits(const struct pattern *pattern, const struct http_target *target)
{
    if (pattern->count != target->part_count)
        return false;
    for (size_t i = 0; i < pattern->count; i++) {
        if (pattern->parts[i] == NULL ? target->parts[i][0] == '\0'
                                      : strcmp(pattern->parts[i], target->parts[i]) != 0)
            return false;
    }
    return true;
}

static bool serves(const struct http_route *route, const char *method)
{
    return strcmp(route->method, method) == 0 ||
           (strcmp(method, "HEAD") == 0 && strcmp(route->method, "GET") == 0);
}

static void allow_add(char allow[HTTP_ALLOW_SIZE], const char *method)
{
    size_t used = strlen(allow);
    (void)snprintf(allow + used, HTTP_ALLOW_SIZE - used, "%s%s%s", used > 0 ? ", " : "", method,
                   strcmp(method, "GET") == 0 ? ", HEAD" : "");
}

const struct http_route *http_router_find(const struct http_router *router, const char *method,
                                          const struct http_target *target,
                                          char allow[HTTP_ALLOW_SIZE])
{
    allow[0] = '\0';
    for (size_t i = 0; i < router->count; i++) {
        const struct pattern *pattern = &router->patterns[i];
        if (!fits(pattern, target))
            continue;
        if (serves(pattern->route, method))
            return pattern->route;
        allow_add(allow, pattern->route->method);
    }
    return NULL;
}

int http_route_part(const struct http_route *route, const char *name)
{
    size_t length = strlen(name);
    int index = 0;
    for (const char *slash = route->path; slash != NULL && slash[1] != '\0'; index++) {
        const char *part = slash + 1;
        if (part[0] == '{' && strncmp(part + 1, name, length) == 0 && part[1 + length] == '}')
            return index;
        slash = strchr(part, '/');
    }
    return -1;
}
