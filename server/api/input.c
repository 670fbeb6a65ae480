/* Reading the body: every fault names its field. */
#include <math.h>
#include <stdarg.h>
#include <stdio.h>
#include <string.h>

#include "call.h"
#include "ebbmark/text.h"

bool api_call_body(struct api_call *call, bool may_be_absent, json_t **out)
{
    size_t size;
    (void)http_body(call->exchange, &size);
    if (size == 0 && may_be_absent) {
        *out = NULL;
        return true;
    }
    call->answered = !http_body_json(call->exchange, out);
    return !call->answered;
}

void api_input_fault(const struct api_input *input, const char *name, const char *format, ...)
{
    char field[BASE_FIELD_SIZE], detail[BASE_SENTENCE_SIZE];
    va_list list;
    va_start(list, format);
    (void)vsnprintf(detail, sizeof detail, format, list);
    va_end(list);
    (void)snprintf(field, sizeof field, "%s%s", input->prefix, name);
    struct api_call *call = input->call;
    if (call->faults == NULL)
        call->faults = json_array();
    if (json_array_size(call->faults) < API_FAULTS_MOST)
        (void)json_array_append_new(call->faults, json_pack("{s:o, s:o}", "field", api_text(field),
                                                            "detail", api_text(detail)));
    /* Told even when there is no memory for the list. */
    if (call->error.kind == BASE_NONE)
        (void)base_fail_field(&call->error, BASE_INVALID, field, "%s", detail);
}

static bool is_listed(const char *name, const char *const *names)
{
    while (*names != NULL && strcmp(*names, name) != 0)
        names++;
    return *names != NULL;
}

void api_input_only(const struct api_input *input, const char *const *names)
{
    const char *name;
    json_t *value;
    json_object_foreach(input->object, name, value) if (!is_listed(name, names))
        api_input_fault(input, name, "There is no field of this name here.");
}

/* The member; when it is missing though required, a fault. */
static json_t *member(const struct api_input *input, const char *name, bool required)
{
    json_t *value = json_object_get(input->object, name);
    if (value == NULL && required)
        api_input_fault(input, name, "%s%s is missing.", input->prefix, name);
    return value;
}

bool api_input_text(const struct api_input *input, const char *name, bool required,
                    size_t bytes_most, const char **out)
{
    json_t *value = member(input, name, required);
    if (value == NULL || (json_is_null(value) && !required))
        return false;
    if (!json_is_string(value))
        api_input_fault(input, name, "%s%s must be a text.", input->prefix, name);
    else if (json_string_length(value) > bytes_most)
        api_input_fault(input, name, "%s%s is longer than %zu bytes.", input->prefix, name,
                        bytes_most);
    else
        *out = json_string_value(value);
    return json_is_string(value) && json_string_length(value) <= bytes_most;
}

bool api_input_number(const struct api_input *input, const char *name, bool required, double least,
                      double most, double *out)
{
    json_t *value = member(input, name, required);
    if (value == NULL)
        return false;
    double number = json_number_value(value);
    if (json_is_number(value) && isfinite(number) && number >= least && number <= most) {
        *out = number;
        return true;
    }
    char from[BASE_NUMBER_SIZE], to[BASE_NUMBER_SIZE];
    if (isfinite(least) && isfinite(most))
        api_input_fault(input, name, "%s%s must be a number from %s to %s.", input->prefix, name,
                        base_text_number(from, least), base_text_number(to, most));
    else
        api_input_fault(input, name, "%s%s must be a number.", input->prefix, name);
    return false;
}

bool api_input_boolean(const struct api_input *input, const char *name, bool *out)
{
    json_t *value = member(input, name, false);
    if (value == NULL)
        return false;
    if (!json_is_boolean(value))
        api_input_fault(input, name, "%s%s must be true or false.", input->prefix, name);
    *out = json_is_true(value);
    return json_is_boolean(value);
}

bool api_input_word(const struct api_input *input, const char *name, bool required,
                    const char *const *words, size_t *out)
{
    json_t *value = member(input, name, required);
    if (value == NULL)
        return false;
    const char *text = json_string_value(value);
    for (size_t i = 0; text != NULL && words[i] != NULL; i++)
        if (strcmp(words[i], text) == 0) {
            *out = i;
            return true;
        }
    char listed[160] = "";
    for (size_t i = 0; words[i] != NULL; i++) {
        size_t used = strlen(listed);
        (void)snprintf(listed + used, sizeof listed - used, "%s%s",
                       i == 0                 ? ""
                       : words[i + 1] == NULL ? " or "
                                              : ", ",
                       words[i]);
    }
    api_input_fault(input, name, "%s%s must be %s.", input->prefix, name, listed);
    return false;
}

bool api_input_array(const struct api_input *input, const char *name, bool required, json_t **out)
{
    json_t *value = member(input, name, required);
    if (value == NULL)
        return false;
    if (!json_is_array(value))
        api_input_fault(input, name, "%s%s must be a list.", input->prefix, name);
    *out = value;
    return json_is_array(value);
}

bool api_call_no_body(struct api_call *call)
{
    static const char *const names[] = {NULL};
    struct api_input input = {call, NULL, ""};
    if (!api_call_body(call, true, &input.object))
        return false;
    api_input_only(&input, names);
    return api_input_end(call);
}

bool api_input_end(struct api_call *call)
{
    if (call->error.kind == BASE_NONE)
        return true;
    if (call->faults != NULL && json_array_size(call->faults) > 0) {
        (void)http_answer_fields(call->exchange, call->faults);
        call->faults = NULL;
        call->answered = true;
    }
    return false;
}
