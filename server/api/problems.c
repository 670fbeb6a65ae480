/* A page for each kind of problem: the address that a problem's type names. */
#include <string.h>

#include "ebbmark/text.h"
#include "inside.h"

static enum http_result show(struct http_exchange *exchange, void *context)
{
    (void)context;
    size_t count;
    const struct http_problem_kind *kinds = http_problem_kinds(&count);
    const char *asked = http_path_part(exchange, "kind");
    for (size_t i = 0; i < count; i++) {
        if (strcmp(kinds[i].kind, asked) != 0)
            continue;
        const char *text =
            base_arena_format(http_arena(exchange), "%u %s\n", kinds[i].status, kinds[i].title);
        return text != NULL
                   ? http_answer_bytes(exchange, 200, "text/plain; charset=utf-8", text,
                                       strlen(text))
                   : http_answer_problem(exchange, "internal", NULL, "There is no memory.");
    }
    return http_answer_problem(exchange, "not_found", NULL, "There is no such kind of problem.");
}

const struct http_route api_problems_routes[] = {
    {"GET", "/problems/{kind}", HTTP_ANYONE, 0, 0, show}, {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
