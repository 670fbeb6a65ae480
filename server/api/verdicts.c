/* The science team's verdicts on candidates. */
#include "verdicts.h"
#include "call.h"
#include "ebbmark/clock.h"
#include "routes.h"

#define NOTE_MOST 4000 /* bytes */

json_t *api_verdict(const void *item)
{
    const struct store_verdict *verdict = item;
    return json_pack("{s:s, s:o, s:I, s:o, s:o}", "verdict", verdict->verdict, "note",
                     api_text(verdict->note), "person", (json_int_t)verdict->person, "handle",
                     api_text_or_null(verdict->handle), "given", api_moment(verdict->given_ms));
}

static bool read_verdict(struct api_call *call, struct store_verdict *out)
{
    static const char *const names[] = {"verdict", "note", NULL};
    struct api_input input = {call, NULL, ""};
    size_t word = 0;
    if (!api_call_body(call, false, &input.object))
        return false;
    out->note = "";
    api_input_only(&input, names);
    (void)api_input_word(&input, "verdict", true, api_verdict_words, &word);
    (void)api_input_text(&input, "note", false, NOTE_MOST, &out->note);
    out->verdict = api_verdict_words[word];
    return api_input_end(call);
}

/* POST /candidates/{id}/verdicts */
static enum http_result give(struct http_exchange *exchange, void *context)
{
    struct api_call call;
    struct store_verdict verdict = {0};
    struct store_candidate candidate;
    struct store_person person;
    bool ok = api_call_begin(&call, exchange, context) &&
              api_call_number(&call, "id", "There is no such candidate.", &verdict.candidate) &&
              read_verdict(&call, &verdict) &&
              store_candidate_read(call.store, call.arena, 0, verdict.candidate, &candidate,
                                   &call.error) &&
              store_person_by_id(call.store, call.arena, call.person, &person, &call.error);
    if (ok) {
        verdict.person = call.person;
        verdict.handle = person.handle;
        verdict.given_ms = base_clock_unix_ms();
        ok = store_verdict_add(call.store, verdict.candidate, verdict.person, verdict.verdict,
                               verdict.note, verdict.given_ms, &verdict.id, &call.error);
    }
    if (!ok)
        return api_call_end(&call);
    return http_answer_json(
        exchange, 201,
        api_joined(api_verdict(&verdict), json_pack("{s:I, s:I}", "id", (json_int_t)verdict.id,
                                                    "candidate", (json_int_t)verdict.candidate)));
}

const struct http_route api_verdicts_routes[] = {
    {"POST", "/api/v1/candidates/{id}/verdicts", HTTP_SCIENCE, HTTP_SLOW, 32768, give},
    {NULL, NULL, HTTP_ANYONE, 0, 0, NULL}};
