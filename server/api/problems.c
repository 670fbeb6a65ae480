/* A page for each kind of problem, at the address that its type names. */
#include <string.h>

#include "call.h"
#include "ebbmark/text.h"
#include "problems.h"
#include "routes.h"

static const struct {
    const char *kind, *sentence;
} advice[] = {
#define X(kind, sentence) {#kind, sentence},
#include "advice.def"
#undef X
};

const char *api_problem_advice(const char *kind)
{
    for (size_t i = 0; i < sizeof advice / sizeof advice[0]; i++)
        if (strcmp(advice[i].kind, kind) == 0)
            return advice[i].sentence;
    return NULL;
}

static const struct http_problem_kind *find(const char *name)
{
    size_t count;
    const struct http_problem_kind *kinds = http_problem_kinds(&count);
    for (size_t i = 0; i < count; i++)
        if (strcmp(kinds[i].kind, name) == 0)
            return &kinds[i];
    return NULL;
}

/* GET /problems/{kind}. What is written comes from the tables alone, never from the address. */
static enum http_result show(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    if (!api_call_begin(&call, exchange, context))
        return api_call_end(&call);
    const struct http_problem_kind *kind = find(http_path_part(exchange, "kind"));
    if (kind == NULL)
        return http_answer_problem(exchange, "not_found", NULL,
                                   "There is no problem of this kind.");
    const char *sentence = api_problem_advice(kind->kind);
    struct base_text page = {0};
    base_text_add_format(&page,
                         "<!doctype html>\n<html lang=\"en\">\n<head>\n<meta charset=\"utf-8\">\n"
                         "<meta name=\"viewport\" content=\"width=device-width\">\n"
                         "<title>%s - Ebbmark</title>\n</head>\n<body>\n<main>\n<h1>%s</h1>\n"
                         "<p>%s</p>\n<p>Answers of this kind have the status %u and the type "
                         "<code>/problems/%s</code>.</p>\n"
                         "<p><a href=\"/\">To the first page</a></p>\n</main>\n</body>\n</html>\n",
                         kind->title, kind->title, sentence == NULL ? "" : sentence, kind->status,
                         kind->kind);
    enum http_result result;
    if (page.failed) {
        (void)base_fail(&call.error, BASE_MEMORY, "There is no memory to write a page.");
        result = api_call_end(&call);
    } else {
        result =
            http_answer_bytes(exchange, 200, "text/html; charset=utf-8", page.data, page.length);
    }
    base_text_free(&page);
    return result;
}

const struct http_route api_problems_routes[] = {
    {"GET", "/problems/{kind}", HTTP_ANYONE, 0, 0, show}, {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
