/* Stars and their light curves. */
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "call.h"
#include "ebbmark/text.h"
#include "routes.h"

#define POINTS_MOST 200000 /* of one answer */

static json_t *star_json(const void *item)
{
    const struct store_star *star = item;
    const struct store_star_properties *known = &star->properties;
    return json_pack("{s:o, s:o, s:o, s:o, s:o, s:o, s:o, s:I, s:I, s:I}", "star",
                     api_text(known->name), "ra", api_number(known->ra_deg), "dec",
                     api_number(known->dec_deg), "magnitude", api_number(known->magnitude),
                     "temperature_k", api_number(known->temperature_k), "radius_rsun",
                     api_number(known->radius_rsun), "mass_msun", api_number(known->mass_msun),
                     "light_curves", (json_int_t)star->light_curves, "segments",
                     (json_int_t)star->segments, "reviews", (json_int_t)star->reviews);
}

/* GET /stars */
static enum http_result list(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct api_page page;
    struct store_star *stars = NULL;
    size_t count = 0;
    bool ok = api_call_begin(&call, exchange, context) && api_call_page(&call, &page) &&
              store_stars_list(call.store, call.arena, page.after, page.limit + 1, &stars, &count,
                               &call.error);
    if (!ok)
        return api_call_end(&call);
    bool more = api_page_cut(&page, &count);
    int64_t last = count > 0 ? stars[count - 1].id : 0;
    return http_answer_json(exchange, 200,
                            json_pack("{s:o, s:o}", "stars",
                                      api_list(stars, count, sizeof *stars, star_json), "next",
                                      api_page_next(more, last)));
}

/* The star of the path with its light curves. */
struct star_found {
    struct store_star star;
    struct store_light_curve *curves;
    size_t curve_count;
};

static bool find_star(struct api_call *call, struct star_found *out)
{
    *out = (struct star_found){0};
    return store_star_by_name(call->store, call->arena, http_path_part(call->exchange, "name"),
                              &out->star, &call->error) &&
           store_light_curves_of_star(call->store, call->arena, out->star.id, &out->curves,
                                      &out->curve_count, &call->error);
}

static json_t *curve_json(const void *item)
{
    const struct store_light_curve *curve = item;
    return json_pack("{s:I, s:o, s:o, s:o, s:I, s:o, s:o, s:o}", "batch", (json_int_t)curve->batch,
                     "time_reference", api_text(curve->time_reference), "starts",
                     api_number(curve->starts_d), "ends", api_number(curve->ends_d), "points",
                     (json_int_t)curve->count, "cadence", api_number(curve->cadence_d),
                     "median_flux", api_number(curve->median_flux), "noise",
                     api_number(curve->noise_point));
}

/* GET /stars/{name} */
static enum http_result show(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct star_found found;
    if (!api_call_begin(&call, exchange, context) || !find_star(&call, &found))
        return api_call_end(&call);
    json_t *curves = api_list(found.curves, found.curve_count, sizeof *found.curves, curve_json);
    return http_answer_json(
        exchange, 200, api_joined(star_json(&found.star), json_pack("{s:o}", "curves", curves)));
}

/* ---- the light curve ------------------------------------------------------------------------ */

struct point {
    double time, flux, trend;
};

/* A stretch of a star's light curves in one time reference. */
struct stretch {
    double from, to;
    const char *time_reference;
    struct point *points;
    size_t count, room;
    bool unordered;
};

static bool read_stretch(struct api_call *call, struct stretch *out)
{
    static const char *const names[] = {"from", "to", NULL};
    *out = (struct stretch){0};
    if (!api_call_query(call, names))
        return false;
    call->answered = !http_query_real(call->exchange, "from", -1e9, 1e9, -INFINITY, &out->from) ||
                     !http_query_real(call->exchange, "to", -1e9, 1e9, INFINITY, &out->to);
    return !call->answered &&
           (out->from <= out->to ||
            base_fail_field(&call->error, BASE_INVALID, "to", "to may not lie before from."));
}

static bool add_point(struct stretch *stretch, const struct store_points *points, size_t i,
                      struct base_error *error)
{
    if (stretch->count == POINTS_MOST)
        return base_fail_field(error, BASE_INVALID, "to",
                               "This stretch has more than %d points; ask for a shorter one with "
                               "from and to.",
                               POINTS_MOST);
    if (stretch->count == stretch->room) {
        size_t room = stretch->room == 0 ? 4096 : 2 * stretch->room;
        struct point *grown = realloc(stretch->points, room * sizeof *grown);
        if (grown == NULL)
            return base_fail(error, BASE_MEMORY, "There is no memory to read a light curve.");
        stretch->points = grown;
        stretch->room = room;
    }
    struct point *point = &stretch->points[stretch->count];
    *point = (struct point){points->time[i], 1.0 + (double)points->flux[i],
                            1.0 + (double)points->trend[i]};
    stretch->unordered = stretch->unordered || (stretch->count > 0 && point[-1].time > point->time);
    stretch->count++;
    return true;
}

static bool add_curve(struct api_call *call, struct stretch *stretch,
                      const struct store_light_curve *curve)
{
    struct store_points points;
    struct base_arena *arena = base_arena_new(0);
    if (arena == NULL)
        return base_fail(&call->error, BASE_MEMORY, "There is no memory to read a light curve.");
    bool ok = store_points_read(call->store, arena, curve->id, &points, &call->error);
    for (size_t i = 0; ok && i < points.count; i++)
        if (points.time[i] >= stretch->from && points.time[i] <= stretch->to)
            ok = add_point(stretch, &points, i, &call->error);
    base_arena_free(arena);
    return ok;
}

static int by_time(const void *left, const void *right)
{
    const struct point *a = left, *b = right;
    return a->time < b->time ? -1 : a->time > b->time ? 1 : 0;
}

/* Times of different references cannot stand in one list, so that of the first light curve that
 * reaches into the stretch counts. */
static bool gather(struct api_call *call, const struct star_found *found, struct stretch *stretch)
{
    bool ok = true;
    for (size_t i = 0; ok && i < found->curve_count; i++) {
        const struct store_light_curve *curve = &found->curves[i];
        if (curve->ends_d < stretch->from || curve->starts_d > stretch->to)
            continue;
        if (stretch->time_reference == NULL)
            stretch->time_reference = curve->time_reference;
        if (strcmp(stretch->time_reference, curve->time_reference) == 0)
            ok = add_curve(call, stretch, curve);
    }
    if (stretch->time_reference == NULL && found->curve_count > 0)
        stretch->time_reference = found->curves[0].time_reference;
    if (ok && stretch->unordered)
        qsort(stretch->points, stretch->count, sizeof *stretch->points, by_time);
    return ok;
}

static void add_column(struct base_text *text, const char *name, const struct stretch *stretch,
                       size_t offset)
{
    char number[BASE_NUMBER_SIZE];
    base_text_add_format(text, ",\"%s\":[", name);
    for (size_t i = 0; i < stretch->count; i++) {
        double value;
        memcpy(&value, (const char *)&stretch->points[i] + offset, sizeof value);
        if (i > 0)
            base_text_add_char(text, ',');
        base_text_add(text, isfinite(value) ? base_text_number(number, value) : "null");
    }
    base_text_add_char(text, ']');
}

static enum http_result answer_stretch(struct api_call *call, const struct star_found *found,
                                       const struct stretch *stretch)
{
    struct base_text text = {0};
    const char *reference = stretch->time_reference == NULL ? "" : stretch->time_reference;
    json_t *head = json_pack("{s:o, s:o}", "star", api_text(found->star.properties.name),
                             "time_reference", api_text(reference));
    char *opened = head == NULL ? NULL : json_dumps(head, JSON_COMPACT);
    json_decref(head);
    if (opened != NULL)
        base_text_add_bytes(&text, opened, strlen(opened) - 1);
    free(opened);
    add_column(&text, "times", stretch, offsetof(struct point, time));
    add_column(&text, "flux", stretch, offsetof(struct point, flux));
    add_column(&text, "trend", stretch, offsetof(struct point, trend));
    base_text_add_char(&text, '}');
    enum http_result result;
    if (opened == NULL || text.failed) {
        (void)base_fail(&call->error, BASE_MEMORY, "There is no memory to write a light curve.");
        result = api_call_end(call);
    } else {
        result = http_answer_bytes(call->exchange, 200, "application/json", text.data, text.length);
    }
    base_text_free(&text);
    return result;
}

/* GET /stars/{name}/light-curve */
static enum http_result show_curve(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct star_found found;
    struct stretch stretch = {0};
    bool ok = api_call_begin(&call, exchange, context) && read_stretch(&call, &stretch) &&
              find_star(&call, &found) && gather(&call, &found, &stretch);
    enum http_result result = ok ? answer_stretch(&call, &found, &stretch) : api_call_end(&call);
    free(stretch.points);
    return result;
}

const struct http_route api_stars_routes[] = {
    {"GET", "/api/v1/stars", HTTP_SCIENCE, HTTP_SLOW, 0, list},
    {"GET", "/api/v1/stars/{name}", HTTP_SCIENCE, HTTP_SLOW, 0, show},
    {"GET", "/api/v1/stars/{name}/light-curve", HTTP_SCIENCE, HTTP_SLOW, 0, show_curve},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
