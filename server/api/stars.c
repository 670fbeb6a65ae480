#include <math.h>

#include "inside.h"

#define LIMIT_MAX 1000

static json_t *star_json(const struct store_star *star)
{
    const struct store_star_properties *is = &star->properties;
    return json_pack("{s:s,s:o,s:o,s:o,s:o,s:o,s:o,s:I,s:I,s:I}", "star", is->name, "ra",
                     json_number(is->ra_deg), "dec", json_number(is->dec_deg), "magnitude",
                     json_number(is->magnitude), "temperature_k", json_number(is->temperature_k),
                     "radius_rsun", json_number(is->radius_rsun), "mass_msun",
                     json_number(is->mass_msun), "light_curves", (json_int_t)star->light_curves,
                     "segments", (json_int_t)star->segments, "reviews", (json_int_t)star->reviews);
}

static enum http_result list(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    int64_t limit, after;
    struct store_star *stars;
    size_t count;
    struct base_error error = {0};
    if (!http_query_integer(exchange, "limit", 1, LIMIT_MAX, 100, &limit) ||
        !cursor_read(exchange, &after))
        return HTTP_ANSWERED;
    if (!store_stars_list(campaign_store(api->campaign), http_arena(exchange), after, (size_t)limit,
                          &stars, &count, &error))
        return http_answer_error(exchange, &error);
    json_t *rows = json_array();
    for (size_t i = 0; i < count; i++)
        (void)json_array_append_new(rows, star_json(&stars[i]));
    return answer_json(
        exchange, 200,
        json_pack("{s:o,s:o}", "stars", rows, "next",
                  cursor_make(count == (size_t)limit, count > 0 ? stars[count - 1].id : 0)));
}

static enum http_result one(struct http_exchange *exchange, void *context)
{
    struct api_server *api = context;
    struct store_star star;
    struct base_error error = {0};
    if (!store_star_by_name(campaign_store(api->campaign), http_arena(exchange),
                            http_path_part(exchange, "name"), &star, &error))
        return http_answer_error(exchange, &error);
    return answer_json(exchange, 200, star_json(&star));
}

/* Points of one light curve within [from, to], appended. */
static void append_points(const struct store_points *points, double from, double to, json_t *times,
                          json_t *flux, json_t *trend)
{
    for (size_t i = 0; i < points->count; i++) {
        if (points->time[i] < from || points->time[i] > to)
            continue;
        (void)json_array_append_new(times, json_real(points->time[i]));
        (void)json_array_append_new(flux, json_real(1.0 + (double)points->flux[i]));
        (void)json_array_append_new(trend, json_real(1.0 + (double)points->trend[i]));
    }
}

static enum http_result light_curve(struct http_exchange *exchange, void *context)
{
    struct store *store = campaign_store(((struct api_server *)context)->campaign);
    struct base_arena *arena = http_arena(exchange);
    double from, to;
    struct store_star star;
    struct store_light_curve *curves;
    size_t count;
    struct base_error error = {0};
    if (!http_query_real(exchange, "from", -1e9, 1e9, -1e9, &from) ||
        !http_query_real(exchange, "to", -1e9, 1e9, 1e9, &to))
        return HTTP_ANSWERED;
    if (!store_star_by_name(store, arena, http_path_part(exchange, "name"), &star, &error) ||
        !store_light_curves_of_star(store, arena, star.id, &curves, &count, &error))
        return http_answer_error(exchange, &error);
    json_t *times = json_array(), *flux = json_array(), *trend = json_array();
    bool ok = true;
    for (size_t i = 0; ok && i < count; i++) {
        struct store_points points;
        if (curves[i].ends_d < from || curves[i].starts_d > to)
            continue;
        ok = store_points_read(store, arena, curves[i].id, &points, &error);
        if (ok)
            append_points(&points, from, to, times, flux, trend);
    }
    json_t *answer = json_pack("{s:s,s:s,s:o,s:o,s:o}", "star", star.properties.name,
                               "time_reference", count > 0 ? curves[0].time_reference : "", "times",
                               times, "flux", flux, "trend", trend);
    if (ok)
        return answer_json(exchange, 200, answer);
    json_decref(answer);
    return http_answer_error(exchange, &error);
}

const struct http_route api_stars_routes[] = {
    {"GET", "/api/v1/stars", HTTP_SCIENCE, HTTP_SLOW, 0, list},
    {"GET", "/api/v1/stars/{name}", HTTP_SCIENCE, HTTP_SLOW, 0, one},
    {"GET", "/api/v1/stars/{name}/light-curve", HTTP_SCIENCE, HTTP_SLOW, 0, light_curve},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
