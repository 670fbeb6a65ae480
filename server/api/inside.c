#include "inside.h"

#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/clock.h"

json_t *json_time(int64_t unix_ms)
{
    char text[BASE_CLOCK_SIZE];
    return unix_ms == 0 ? json_null() : json_string(base_clock_rfc3339(text, unix_ms));
}

json_t *json_number(double value)
{
    return isfinite(value) ? json_real(value) : json_null();
}

json_t *json_text(const char *text)
{
    return text == NULL || text[0] == '\0' ? json_null() : json_string(text);
}

json_t *json_rate(double value, double low, double high)
{
    return json_pack("{s:o,s:o,s:o}", "value", json_number(value), "low", json_number(low), "high",
                     json_number(high));
}

static const char *const role_names[] = {
    [STORE_REVIEWER] = "reviewer", [STORE_SCIENCE] = "science", [STORE_ADMIN] = "admin"};

const char *role_name(enum store_role role)
{
    return role_names[role];
}

bool role_read(const char *text, enum store_role *out)
{
    for (int role = STORE_REVIEWER; role <= STORE_ADMIN; role++)
        if (strcmp(text, role_names[role]) == 0) {
            *out = (enum store_role)role;
            return true;
        }
    return false;
}

json_t *json_person(const struct store_person *person)
{
    return json_pack("{s:I,s:s,s:s,s:b,s:b,s:o}", "person", (json_int_t)person->id, "handle",
                     person->handle, "role", role_name(person->role), "guest",
                     person->passphrase[0] == '\0', "credit", person->credit, "joined",
                     json_time(person->joined_ms));
}

json_t *json_mark(const struct store_mark *mark)
{
    return json_pack("{s:f,s:f,s:f,s:f,s:s}", "starts", mark->starts_d, "ends", mark->ends_d, "low",
                     mark->low, "high", mark->high, "certainty", mark->sure ? "sure" : "unsure");
}

json_t *json_conditions(unsigned conditions)
{
    json_t *list = json_array();
    if ((conditions & STORE_BREAK) != 0)
        (void)json_array_append_new(list, json_string("break"));
    if ((conditions & STORE_KEEPS_CHANGING) != 0)
        (void)json_array_append_new(list, json_string("keeps_changing"));
    return list;
}

enum http_result answer_json(struct http_exchange *exchange, unsigned status, json_t *json)
{
    if (json != NULL)
        return http_answer_json(exchange, status, json);
    const struct base_error error = {BASE_MEMORY, "There is no memory for the answer.", ""};
    return http_answer_error(exchange, &error);
}

bool members_known(struct http_exchange *exchange, const json_t *object, const char *where,
                   const char *const *known)
{
    const char *name;
    json_t *value;
    json_object_foreach((json_t *)(uintptr_t)object, name, value)
    {
        size_t i = 0;
        while (known[i] != NULL && strcmp(known[i], name) != 0)
            i++;
        if (known[i] == NULL) {
            char field[BASE_FIELD_SIZE];
            (void)snprintf(field, sizeof field, "%s%.60s", where, name);
            (void)http_answer_problem(exchange, "invalid", field, "There is no member %s here.",
                                      field);
            return false;
        }
    }
    return true;
}

/* Digits and nothing else, within int64_t. */
static bool whole_number(const char *text, int64_t *out)
{
    char *end = NULL;
    if (text[0] < '0' || text[0] > '9' || strlen(text) > 18)
        return false;
    *out = strtoll(text, &end, 10);
    return *end == '\0';
}

bool path_number(struct http_exchange *exchange, const char *name, int64_t *out)
{
    if (whole_number(http_path_part(exchange, name), out))
        return true;
    (void)http_answer_problem(exchange, "not_found", NULL, "There is nothing at this address.");
    return false;
}

bool cursor_read(struct http_exchange *exchange, int64_t *out)
{
    const char *text = http_query(exchange, "cursor");
    *out = 0;
    if (text == NULL || (text[0] == 'c' && whole_number(text + 1, out)))
        return true;
    (void)http_answer_problem(exchange, "invalid", "cursor",
                              "cursor is the `next` of an earlier answer.");
    return false;
}

json_t *cursor_make(bool more, int64_t value)
{
    char text[32];
    (void)snprintf(text, sizeof text, "c%" PRId64, value);
    return more ? json_string(text) : json_null();
}
