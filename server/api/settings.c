#include <stdio.h>

#include "ebbmark/text.h"
#include "inside.h"

#define BODY_MAX 8192

/* The value of row i of the settings' table. */
static json_t *value_json(const struct campaign_settings *now, unsigned i)
{
    unsigned row = 0;
#define VALUE_integer(x) json_integer(x)
#define VALUE_real(x) json_real(x)
#define X(name, kind, standard, least, most, unit, sentence)                                       \
    if (row++ == i)                                                                                \
        return VALUE_##kind(now->name);
    EBBMARK_SETTINGS(X)
#undef X
    return json_null();
}

static enum http_result show(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    struct campaign_settings now = campaign_settings_now(api->campaign);
    json_t *rows = json_array();
    for (unsigned i = 0; i < campaign_setting_count; i++) {
        const struct campaign_setting *setting = &campaign_setting_table[i];
        (void)json_array_append_new(rows, json_pack("{s:s,s:o,s:f,s:f,s:f,s:s,s:s}", "name",
                                                    setting->name, "value", value_json(&now, i),
                                                    "default", setting->standard, "least",
                                                    setting->least, "most", setting->most, "unit",
                                                    setting->unit, "sentence", setting->sentence));
    }
    return answer_json(exchange, 200, json_pack("{s:o}", "settings", rows));
}

static enum http_result change(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    json_t *body, *value;
    const char *name;
    struct base_error error = {0};
    if (!http_body_json(exchange, &body))
        return HTTP_ANSWERED;
    json_object_foreach(body, name, value)
    {
        char text[BASE_NUMBER_SIZE];
        if (!json_is_number(value))
            return http_answer_problem(exchange, "invalid", name, "%s is a number.", name);
        if (!campaign_setting_change(api->campaign, name,
                                     base_text_number(text, json_number_value(value)),
                                     http_identity(exchange)->person, &error))
            return error.kind == BASE_NOT_FOUND
                       ? http_answer_problem(exchange, "invalid", name, "%s", error.sentence)
                       : http_answer_error(exchange, &error);
    }
    return show(exchange, context);
}

const struct http_route api_settings_routes[] = {
    {"GET", "/api/v1/campaign", HTTP_ADMIN, HTTP_SLOW, 0, show},
    {"PATCH", "/api/v1/campaign", HTTP_ADMIN, HTTP_SLOW, BODY_MAX, change},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
