/* openapi.json against the tables it describes: routes, problems, columns. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <jansson.h>
#include <stdio.h>
#include <string.h>
#include <strings.h>

#include "../../../server/api/call.h"
#include "../../../server/api/embedded.h"
#include "../../../server/api/problems.h"
#include "../../../server/api/routes.h"
#include "ebbmark/tables.h"

static const char *const methods[] = {"GET", "POST", "PATCH", "DELETE", "PUT", NULL};

static json_t *description(void)
{
    json_error_t wrong;
    json_t *json = json_loadb((const char *)api_description.data, api_description.size,
                              JSON_REJECT_DUPLICATES, &wrong);
    if (json == NULL)
        fail_msg("openapi.json, line %d: %s", wrong.line, wrong.text);
    return json;
}

/* A member of a member of …; the names end with NULL. Fails when it is not there. */
static json_t *inside(json_t *json, ...) __attribute__((sentinel));
static json_t *inside(json_t *json, ...)
{
    va_list names;
    va_start(names, json);
    for (const char *name = va_arg(names, const char *); name != NULL;
         name = va_arg(names, const char *)) {
        json = json_object_get(json, name);
        if (json == NULL)
            fail_msg("openapi.json has no %s there", name);
    }
    va_end(names);
    return json;
}

/* The operation of a route, or NULL. */
static json_t *operation_of(json_t *described, const char *method, const char *path)
{
    char lower[8] = "";
    for (size_t i = 0; method[i] != '\0' && i + 1 < sizeof lower; i++)
        lower[i] = (char)(method[i] | 0x20);
    return json_object_get(json_object_get(json_object_get(described, "paths"), path), lower);
}

static const struct http_route *route_of(const char *method, const char *path)
{
    for (size_t t = 0; api_routes[t] != NULL; t++)
        for (const struct http_route *route = api_routes[t]; route->method != NULL; route++)
            if (strcasecmp(route->method, method) == 0 && strcmp(route->path, path) == 0)
                return route;
    return NULL;
}

static void every_route_is_described_with_its_role_and_its_body(void **state)
{
    static const char *const roles[] = {"anyone", "reviewer", "science", "admin"};
    json_t *described = description();
    size_t count = 0;
    (void)state;
    for (size_t t = 0; api_routes[t] != NULL; t++)
        for (const struct http_route *route = api_routes[t]; route->method != NULL; route++) {
            json_t *operation = operation_of(described, route->method, route->path);
            if (operation == NULL)
                fail_msg("%s %s is not in openapi.json", route->method, route->path);
            assert_string_equal(json_string_value(inside(operation, "x-role", NULL)),
                                roles[route->who]);
            bool takes_body = json_object_get(operation, "requestBody") != NULL;
            if (takes_body != (route->body_limit > 0))
                fail_msg("%s %s: a body in the one and none in the other", route->method,
                         route->path);
            bool open = json_array_size(inside(operation, "security", NULL)) == 0;
            assert_true(open == (route->who == HTTP_ANYONE));
            count++;
        }
    assert_true(count >= 30);
    json_decref(described);
}

static void every_operation_described_has_a_route(void **state)
{
    json_t *described = description();
    const char *path, *method;
    json_t *operations, *operation;
    (void)state;
    json_object_foreach(inside(described, "paths", NULL), path, operations)
    {
        json_object_foreach(operations, method, operation)
        {
            if (route_of(method, path) == NULL)
                fail_msg("%s %s is described but is no route", method, path);
        }
    }
    json_decref(described);
}

static void every_part_of_a_path_is_a_parameter(void **state)
{
    json_t *described = description();
    (void)state;
    for (size_t t = 0; api_routes[t] != NULL; t++)
        for (const struct http_route *route = api_routes[t]; route->method != NULL; route++) {
            json_t *parameters =
                json_object_get(operation_of(described, route->method, route->path), "parameters");
            for (const char *at = strchr(route->path, '{'); at != NULL; at = strchr(at + 1, '{')) {
                bool found = false;
                size_t i, length = strcspn(at + 1, "}");
                json_t *parameter;
                json_array_foreach(parameters, i, parameter)
                {
                    const char *name = json_string_value(inside(parameter, "name", NULL));
                    found = found || (strcmp(json_string_value(inside(parameter, "in", NULL)),
                                             "path") == 0 &&
                                      strlen(name) == length && strncmp(name, at + 1, length) == 0);
                }
                if (!found)
                    fail_msg("%s: %s has no parameter", route->path, at);
            }
        }
    json_decref(described);
}

static void methods_are_those_that_http_has(void **state)
{
    (void)state;
    for (size_t t = 0; api_routes[t] != NULL; t++)
        for (const struct http_route *route = api_routes[t]; route->method != NULL; route++) {
            size_t i = 0;
            while (methods[i] != NULL && strcmp(methods[i], route->method) != 0)
                i++;
            assert_non_null(methods[i]);
        }
}

static void every_kind_of_problem_is_described_and_has_advice(void **state)
{
    json_t *described = description();
    json_t *types =
        inside(described, "components", "schemas", "Problem", "properties", "type", "enum", NULL);
    size_t count;
    const struct http_problem_kind *kinds = http_problem_kinds(&count);
    (void)state;
    assert_int_equal(json_array_size(types), count);
    for (size_t i = 0; i < count; i++) {
        char type[64];
        (void)snprintf(type, sizeof type, "/problems/%s", kinds[i].kind);
        assert_string_equal(json_string_value(json_array_get(types, i)), type);
        const char *advice = api_problem_advice(kinds[i].kind);
        if (advice == NULL || advice[0] == '\0' || advice[strlen(advice) - 1] != '.')
            fail_msg("advice.def has no sentence for %s", kinds[i].kind);
    }
    assert_null(api_problem_advice("no_such_kind"));
    json_decref(described);
}

static void the_columns_of_candidates_are_described_as_they_are(void **state)
{
    static const char *const types[] = {[EXPORT_INTEGER] = "integer",
                                        [EXPORT_REAL] = "number",
                                        [EXPORT_TEXT] = "string",
                                        [EXPORT_BOOLEAN] = "boolean"};
    json_t *described = description();
    json_t *columns =
        inside(described, "components", "schemas", "CandidateColumns", "properties", NULL);
    const struct export_table *table = campaign_table(CAMPAIGN_CANDIDATES);
    (void)state;
    assert_int_equal(json_object_size(columns), table->column_count);
    for (size_t i = 0; i < table->column_count; i++) {
        json_t *column = inside(columns, table->columns[i].name, NULL);
        assert_string_equal(json_string_value(json_array_get(inside(column, "type", NULL), 0)),
                            types[table->columns[i].type]);
        assert_string_equal(json_string_value(inside(column, "description", NULL)),
                            table->columns[i].description);
    }
    json_decref(described);
}

static void follow(json_t *whole, json_t *json)
{
    const char *name;
    json_t *value;
    size_t i;
    json_array_foreach(json, i, value) follow(whole, value);
    json_object_foreach(json, name, value)
    {
        follow(whole, value);
        if (strcmp(name, "$ref") != 0)
            continue;
        char path[128];
        (void)snprintf(path, sizeof path, "%s", json_string_value(value));
        assert_true(strncmp(path, "#/", 2) == 0);
        json_t *at = whole;
        char *rest = NULL;
        for (char *part = strtok_r(path + 2, "/", &rest); part != NULL;
             part = strtok_r(NULL, "/", &rest))
            at = json_object_get(at, part);
        if (at == NULL)
            fail_msg("%s leads nowhere", json_string_value(value));
    }
}

static void every_reference_inside_leads_somewhere(void **state)
{
    json_t *described = description();
    (void)state;
    follow(described, described);
    json_decref(described);
}

static void every_page_is_carried_with_a_type_and_a_tag_of_its_own(void **state)
{
    (void)state;
    assert_true(web_file_count > 0);
    for (size_t i = 0; i < web_file_count; i++) {
        const struct http_static_file *file = &web_files[i];
        assert_true(file->path[0] == '/');
        assert_non_null(strchr(file->media_type, '/'));
        assert_int_equal(strlen(file->etag), 34);
        assert_true(file->gzip == NULL || file->gzip_size < file->size);
        assert_null(strstr(file->path, "package"));
        for (size_t k = 0; k < i; k++)
            assert_true(strcmp(web_files[k].path, file->path) < 0);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(every_route_is_described_with_its_role_and_its_body),
        cmocka_unit_test(every_operation_described_has_a_route),
        cmocka_unit_test(every_part_of_a_path_is_a_parameter),
        cmocka_unit_test(methods_are_those_that_http_has),
        cmocka_unit_test(every_kind_of_problem_is_described_and_has_advice),
        cmocka_unit_test(the_columns_of_candidates_are_described_as_they_are),
        cmocka_unit_test(every_reference_inside_leads_somewhere),
        cmocka_unit_test(every_page_is_carried_with_a_type_and_a_tag_of_its_own),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
