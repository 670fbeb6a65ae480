#include <string.h>

#include "inside.h"
#include "sessions.h"

#define BODY_MAX 4096
#define PEOPLE_LIMIT_MAX 1000

/* An optional text member; false, answered, when it is something else. */
static bool text_member(struct http_exchange *exchange, const json_t *body, const char *name,
                        const char **out)
{
    const json_t *value = json_object_get(body, name);
    *out = json_string_value(value);
    if (value == NULL || json_is_null(value) || *out != NULL)
        return true;
    (void)http_answer_problem(exchange, "invalid", name, "%s is a text.", name);
    return false;
}

bool api_session_start(struct http_exchange *exchange, struct api_server *api,
                       const struct store_person *person, struct base_error *error)
{
    double days = (double)campaign_settings_now(api->campaign).session_days;
    char secret[CAMPAIGN_SECRET_SIZE];
    if (!campaign_access_give(api->campaign, STORE_SESSION, person->id, person->role, days, secret,
                              error))
        return false;
    http_answer_cookie(exchange, secret, (int64_t)(days * 86400.0));
    return true;
}

static enum http_result join(struct http_exchange *exchange, void *context)
{
    static const char *const known[] = {"handle", "passphrase", NULL};
    struct api_server *api = context;
    const char *handle, *passphrase;
    json_t *body;
    struct base_error error = {0};
    struct store_person person;
    if (!http_body_json(exchange, &body) || !members_known(exchange, body, "", known) ||
        !text_member(exchange, body, "handle", &handle) ||
        !text_member(exchange, body, "passphrase", &passphrase))
        return HTTP_ANSWERED;
    if (!campaign_join(api->campaign, handle, passphrase, http_arena(exchange), &person, &error) ||
        !api_session_start(exchange, api, &person, &error))
        return http_answer_error(exchange, &error);
    return answer_json(exchange, 201, json_person(&person));
}

static enum http_result list(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    int64_t limit, after;
    struct base_error error = {0};
    struct store_person *people;
    size_t count;
    if (!http_query_integer(exchange, "limit", 1, PEOPLE_LIMIT_MAX, 100, &limit) ||
        !cursor_read(exchange, &after))
        return HTTP_ANSWERED;
    if (!store_people_list(campaign_store(api->campaign), http_arena(exchange), after,
                           (size_t)limit, &people, &count, &error))
        return http_answer_error(exchange, &error);
    json_t *rows = json_array();
    for (size_t i = 0; i < count; i++) {
        json_t *row = json_person(&people[i]);
        (void)json_object_set_new(row, "suspended", json_boolean(people[i].suspended));
        (void)json_object_set_new(row, "left", json_boolean(people[i].left));
        (void)json_array_append_new(rows, row);
    }
    return answer_json(
        exchange, 200,
        json_pack("{s:o,s:o}", "people", rows, "next",
                  cursor_make(count == (size_t)limit, count > 0 ? people[count - 1].id : 0)));
}

/* Apply {role?, suspended?} to a person; false with the error. */
static bool change(struct api_server *api, int64_t id, const json_t *body, struct base_error *error)
{
    const json_t *role_member = json_object_get(body, "role");
    const json_t *suspended = json_object_get(body, "suspended");
    enum store_role role = STORE_REVIEWER;
    if (role_member != NULL && (json_string_value(role_member) == NULL ||
                                !role_read(json_string_value(role_member), &role)))
        return base_fail_field(error, BASE_INVALID, "role",
                               "role is \"reviewer\", \"science\" or \"admin\".");
    if (suspended != NULL && !json_is_boolean(suspended))
        return base_fail_field(error, BASE_INVALID, "suspended", "suspended is true or false.");
    struct store *store = campaign_store(api->campaign);
    return (role_member == NULL || store_person_set_role(store, id, role, error)) &&
           (suspended == NULL ||
            store_person_set_suspended(store, id, json_is_true(suspended), error));
}

static enum http_result patch(struct http_exchange *exchange, void *context)
{
    static const char *const known[] = {"role", "suspended", NULL};
    struct api_server *api = context;
    int64_t id;
    json_t *body;
    struct base_error error = {0};
    struct store_person person;
    if (!path_number(exchange, "id", &id) || !http_body_json(exchange, &body) ||
        !members_known(exchange, body, "", known))
        return HTTP_ANSWERED;
    if (id == http_identity(exchange)->person)
        return http_answer_problem(exchange, "not_allowed", NULL,
                                   "Nobody changes their own role; ask another admin.");
    if (!change(api, id, body, &error) ||
        !store_person_by_id(campaign_store(api->campaign), http_arena(exchange), id, &person,
                            &error))
        return http_answer_error(exchange, &error);
    http_identity_forget(api->http, id);
    json_t *answer = json_person(&person);
    (void)json_object_set_new(answer, "suspended", json_boolean(person.suspended));
    return answer_json(exchange, 200, answer);
}

const struct http_route api_people_routes[] = {
    {"POST", "/api/v1/people", HTTP_ANYONE, HTTP_SLOW, BODY_MAX, join},
    {"GET", "/api/v1/people", HTTP_ADMIN, HTTP_SLOW, 0, list},
    {"PATCH", "/api/v1/people/{id}", HTTP_ADMIN, HTTP_SLOW, BODY_MAX, patch},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
