/* The campaign's settings. */
#include <math.h>
#include <string.h>

#include "call.h"
#include "ebbmark/text.h"
#include "routes.h"

#define CHANGES_MOST 64

static enum http_result answer_settings(struct api_call *call)
{
    const struct campaign_settings settings = campaign_settings_now(call->campaign);
    json_t *list = json_array();
    bool ok = list != NULL;
    for (unsigned i = 0; ok && i < campaign_setting_count; i++) {
        const struct campaign_setting *row = &campaign_setting_table[i];
        json_t *json = json_pack("{s:s, s:o, s:o, s:o, s:o, s:b, s:s, s:s}", "name", row->name,
                                 "value", api_number(campaign_setting_value(&settings, i)),
                                 "default", api_number(row->standard), "least",
                                 api_number(row->least), "most", api_number(row->most), "whole",
                                 !row->is_real, "unit", row->unit, "sentence", row->sentence);
        ok = json_array_append_new(list, json) == 0;
    }
    if (!ok) {
        json_decref(list);
        list = NULL;
    }
    return http_answer_json(call->exchange, 200, json_pack("{s:o}", "settings", list));
}

/* GET /campaign */
static enum http_result show(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    return api_call_begin(&call, exchange, context) ? answer_settings(&call) : api_call_end(&call);
}

/* ---- changing several at once --------------------------------------------------------------- */

struct change {
    const char *name;
    double to, from;
    bool made;
};
struct changes {
    struct change list[CHANGES_MOST];
    size_t count;
};

static bool set(struct api_call *call, const char *name, double value)
{
    char text[BASE_NUMBER_SIZE];
    return campaign_setting_change(call->campaign, name, base_text_number(text, value),
                                   call->person, &call->error);
}

/* What is asked for, each checked against its own range. */
static bool read_changes(struct api_call *call, struct changes *out)
{
    const struct campaign_settings settings = campaign_settings_now(call->campaign);
    struct api_input input = {call, NULL, ""};
    const char *names[CHANGES_MOST + 1] = {NULL};
    *out = (struct changes){0};
    if (!api_call_body(call, false, &input.object))
        return false;
    for (unsigned i = 0; i < campaign_setting_count && i < CHANGES_MOST; i++) {
        const struct campaign_setting *row = &campaign_setting_table[i];
        double value;
        names[i] = row->name;
        if (!api_input_number(&input, row->name, false, row->least, row->most, &value))
            continue;
        if (!row->is_real && fabs(value - rint(value)) > 0.0)
            api_input_fault(&input, row->name, "%s must be a whole number.", row->name);
        out->list[out->count++] =
            (struct change){row->name, value, campaign_setting_value(&settings, i), false};
    }
    api_input_only(&input, names);
    return api_input_end(call);
}

/* Make all changes or none. One may need another first (looks_least may not pass looks_most), so
 * those that are refused are tried again as long as others go through. */
static bool make_changes(struct api_call *call, struct changes *changes)
{
    size_t left = changes->count;
    for (bool moved = true; left > 0 && moved;) {
        moved = false;
        for (size_t i = 0; i < changes->count; i++) {
            struct change *change = &changes->list[i];
            if (change->made)
                continue;
            call->error = (struct base_error){0};
            change->made = set(call, change->name, change->to);
            moved = moved || change->made;
            left -= change->made ? 1 : 0;
        }
    }
    return left == 0;
}

/* Put back what was made before another failed; the failure that is told stays the first. */
static void take_back(struct api_call *call, struct changes *changes)
{
    const struct base_error told = call->error;
    for (size_t i = 0; i < changes->count; i++) {
        struct change *change = &changes->list[i];
        change->to = change->from;
        change->made = !change->made;
    }
    (void)make_changes(call, changes);
    call->error = told;
}

/* PATCH /campaign */
static enum http_result change(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct changes changes;
    bool ok = api_call_begin(&call, exchange, context) && read_changes(&call, &changes);
    if (ok && !make_changes(&call, &changes)) {
        take_back(&call, &changes);
        ok = false;
    }
    return ok ? answer_settings(&call) : api_call_end(&call);
}

const struct http_route api_campaign_routes[] = {
    {"GET", "/api/v1/campaign", HTTP_ADMIN, 0, 0, show},
    {"PATCH", "/api/v1/campaign", HTTP_ADMIN, HTTP_SLOW, 8192, change},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
