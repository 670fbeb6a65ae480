#include <string.h>

#include "ebbmark/clock.h"
#include "inside.h"

#define BODY_MAX 16384
#define NOTE_MAX 4000

static enum http_result give(struct http_exchange *exchange, void *context)
{
    static const char *const known[] = {"verdict", "note", NULL};
    struct api_server *api = context;
    struct store *store = campaign_store(api->campaign);
    int64_t candidate, id;
    json_t *body;
    struct store_candidate row;
    struct base_error error = {0};
    if (!path_number(exchange, "id", &candidate) || !http_body_json(exchange, &body) ||
        !members_known(exchange, body, "", known))
        return HTTP_ANSWERED;
    const char *verdict = json_string_value(json_object_get(body, "verdict"));
    const json_t *note_member = json_object_get(body, "note");
    const char *note = note_member == NULL ? "" : json_string_value(note_member);
    if (verdict == NULL || (strcmp(verdict, "keep") != 0 && strcmp(verdict, "reject") != 0 &&
                            strcmp(verdict, "unsure") != 0))
        return http_answer_problem(exchange, "invalid", "verdict",
                                   "verdict is \"keep\", \"reject\" or \"unsure\".");
    if (note == NULL || strlen(note) > NOTE_MAX)
        return http_answer_problem(exchange, "invalid", "note",
                                   "note is a text of at most %d bytes.", NOTE_MAX);
    if (!store_candidate_read(store, http_arena(exchange), 0, candidate, &row, &error) ||
        !store_verdict_add(store, candidate, http_identity(exchange)->person, verdict, note,
                           base_clock_unix_ms(), &id, &error))
        return http_answer_error(exchange, &error);
    return answer_json(exchange, 201,
                       json_pack("{s:I,s:I,s:s,s:s}", "id", (json_int_t)id, "candidate",
                                 (json_int_t)candidate, "verdict", verdict, "note", note));
}

const struct http_route api_verdicts_routes[] = {
    {"POST", "/api/v1/candidates/{id}/verdicts", HTTP_SCIENCE, HTTP_SLOW, BODY_MAX, give},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
