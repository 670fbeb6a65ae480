/* Joining; and for admins, who there is. */
#include "call.h"
#include "routes.h"

#define TEXT_MOST 4096 /* bytes; what a handle or passphrase may really hold the campaign knows */

static bool read_joining(struct api_call *call, const char **handle, const char **passphrase)
{
    static const char *const names[] = {"handle", "passphrase", NULL};
    struct api_input input = {call, NULL, ""};
    *handle = *passphrase = NULL;
    if (!api_call_body(call, true, &input.object))
        return false;
    api_input_only(&input, names);
    (void)api_input_text(&input, "handle", false, TEXT_MOST, handle);
    (void)api_input_text(&input, "passphrase", false, TEXT_MOST, passphrase);
    return api_input_end(call);
}

/* POST /people */
static enum http_result join(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct store_person person;
    const char *handle, *passphrase;
    bool ok = api_call_begin(&call, exchange, context) &&
              read_joining(&call, &handle, &passphrase) &&
              campaign_join(call.campaign, handle, passphrase, call.arena, &person, &call.error) &&
              api_session_give(&call, &person);
    return ok ? http_answer_json(exchange, 201, api_person(&person)) : api_call_end(&call);
}

static json_t *person_for_admin(const void *item)
{
    const struct store_person *person = item;
    return api_joined(api_person(person), json_pack("{s:b, s:b}", "suspended", person->suspended,
                                                    "left", person->left));
}

/* GET /people */
static enum http_result list(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct api_page page;
    struct store_person *people = NULL;
    size_t count = 0;
    bool ok = api_call_begin(&call, exchange, context) && api_call_page(&call, &page) &&
              store_people_list(call.store, call.arena, page.after, page.limit + 1, &people, &count,
                                &call.error);
    if (!ok)
        return api_call_end(&call);
    bool more = api_page_cut(&page, &count);
    int64_t last = count > 0 ? people[count - 1].id : 0;
    return http_answer_json(exchange, 200,
                            json_pack("{s:o, s:o}", "people",
                                      api_list(people, count, sizeof *people, person_for_admin),
                                      "next", api_page_next(more, last)));
}

struct change {
    bool has_role, has_suspended, suspended;
    size_t role; /* its place in api_role_words */
};

static bool read_change(struct api_call *call, struct change *out)
{
    static const char *const names[] = {"role", "suspended", NULL};
    struct api_input input = {call, NULL, ""};
    *out = (struct change){0};
    if (!api_call_body(call, false, &input.object))
        return false;
    api_input_only(&input, names);
    out->has_role = api_input_word(&input, "role", false, api_role_words, &out->role);
    out->has_suspended = api_input_boolean(&input, "suspended", &out->suspended);
    return api_input_end(call);
}

/* An admin who locks themselves out needs the command line to come back. */
static bool is_somebody_else(struct api_call *call, int64_t id)
{
    return id != call->person ||
           base_fail(&call->error, BASE_DENIED,
                     "Your own role and suspension are for another admin to change.");
}

/* PATCH /people/{id} */
static enum http_result change(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct change change;
    struct store_person person;
    int64_t id;
    bool ok = api_call_begin(&call, exchange, context) &&
              api_call_number(&call, "id", "There is no such person.", &id) &&
              read_change(&call, &change) && is_somebody_else(&call, id) &&
              store_person_by_id(call.store, call.arena, id, &person, &call.error);
    if (!ok)
        return api_call_end(&call);
    if (change.has_role)
        ok = store_person_set_role(call.store, id, (enum store_role)(change.role + 1), &call.error);
    if (ok && change.has_suspended)
        ok = store_person_set_suspended(call.store, id, change.suspended, &call.error);
    http_identity_forget(http_server_of(exchange), id);
    ok = ok && store_person_by_id(call.store, call.arena, id, &person, &call.error);
    return ok ? http_answer_json(exchange, 200, person_for_admin(&person)) : api_call_end(&call);
}

const struct http_route api_people_routes[] = {
    {"POST", "/api/v1/people", HTTP_ANYONE, HTTP_SLOW, 16384, join},
    {"GET", "/api/v1/people", HTTP_ADMIN, HTTP_SLOW, 0, list},
    {"PATCH", "/api/v1/people/{id}", HTTP_ADMIN, HTTP_SLOW, 4096, change},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
