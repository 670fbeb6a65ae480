/* A consensus run: two passes over the stars, two fits, and the storing of what came out. */
#include "run.h"

#include <assert.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/clock.h"

#define STARS_AT_ONCE 128 /* summed up on the pool, then appended in order */

/* How far along a run is when each step begins. */
#define AT_FIRST_PASS 0.02
#define AT_FIRST_FIT 0.25
#define AT_SECOND_PASS 0.35
#define AT_SECOND_FIT 0.80
#define AT_STORING 0.92

static bool no_memory(struct base_error *error)
{
    (void)base_fail(error, BASE_MEMORY, "There is no memory for the consensus run.");
    return false;
}

static bool tell(const struct run_order *order, double fraction, const char *stage,
                 struct base_error *error)
{
    if (order->progress != NULL)
        order->progress(order->context, fraction, stage);
    if (order->stop != NULL && atomic_load(order->stop))
        return base_fail(error, BASE_CANCELLED, "The consensus run was stopped.");
    return true;
}

/* ---- sums ---- */

void run_sum_open(struct run_sum *sum)
{
    *sum = (struct run_sum){.items = VECTOR_OF(struct consensus_item),
                            .looks = VECTOR_OF(struct consensus_look),
                            .candidates = VECTOR_OF(struct store_candidate),
                            .references = VECTOR_OF(uint64_t),
                            .members = VECTOR_OF(struct store_member),
                            .segments = VECTOR_OF(struct run_segment),
                            .segment_people = VECTOR_OF(int32_t),
                            .covers = VECTOR_OF(struct run_cover),
                            .shares = VECTOR_OF(struct run_share)};
}

void run_sum_free(struct run_sum *sum)
{
    vector_free(&sum->items);
    vector_free(&sum->looks);
    vector_free(&sum->candidates);
    vector_free(&sum->references);
    vector_free(&sum->members);
    vector_free(&sum->segments);
    vector_free(&sum->segment_people);
    vector_free(&sum->covers);
    vector_free(&sum->shares);
}

static bool append(struct vector *to, const struct vector *from)
{
    void *at = vector_add(to, from->count);
    if (at == NULL)
        return false;
    if (from->count > 0)
        memcpy(at, from->items, from->count * from->size);
    return true;
}

/* Append a star's sum to the whole: its indexes move by what was there before. */
static bool absorb(struct run_result *result, struct run_sum *star, struct base_error *error)
{
    struct run_sum *sum = &result->sum;
    struct consensus_item *items = star->items.items;
    for (size_t i = 0; i < star->items.count; i++)
        items[i].first_look += sum->looks.count;
    struct run_cover *covers = star->covers.items;
    for (size_t i = 0; i < star->covers.count; i++) {
        covers[i].item += sum->items.count;
        covers[i].segment += sum->segments.count;
    }
    struct run_segment *segments = star->segments.items;
    for (size_t i = 0; i < star->segments.count; i++)
        segments[i].first_person += sum->segment_people.count;
    const struct run_share *shares = star->shares.items;
    for (size_t i = 0; i < star->shares.count; i++) {
        struct run_share *person = &result->shares[shares[i].person];
        person->looks += shares[i].looks;
        person->marks += shares[i].marks;
        person->days += shares[i].days;
    }
    sum->days_total += star->days_total;
    return (append(&sum->items, &star->items) && append(&sum->looks, &star->looks) &&
            append(&sum->candidates, &star->candidates) &&
            append(&sum->references, &star->references) && append(&sum->members, &star->members) &&
            append(&sum->segments, &star->segments) &&
            append(&sum->segment_people, &star->segment_people) &&
            append(&sum->covers, &star->covers)) ||
           no_memory(error);
}

/* ---- a pass over the stars ---- */

struct chunk {
    const struct run_pass *pass;
    const int64_t *stars;
    struct run_sum sums[STARS_AT_ONCE];
    struct base_error errors[STARS_AT_ONCE];
    bool ok[STARS_AT_ONCE];
};

static void sum_up(void *context, size_t i)
{
    struct chunk *chunk = context;
    run_sum_open(&chunk->sums[i]);
    chunk->ok[i] = run_star(chunk->pass, chunk->stars[i], &chunk->sums[i], &chunk->errors[i]);
}

/* Sum up some stars and append what they came to. */
static bool pass_chunk(struct campaign *campaign, struct chunk *chunk, size_t count,
                       struct run_result *result, struct base_error *error)
{
    base_pool_for(campaign->pool, count, sum_up, chunk);
    bool ok = true;
    for (size_t i = 0; i < count; i++) {
        if (ok && !chunk->ok[i]) {
            ok = false;
            if (error != NULL)
                *error = chunk->errors[i];
        }
        ok = ok && absorb(result, &chunk->sums[i], error);
        run_sum_free(&chunk->sums[i]);
    }
    return ok;
}

struct stretch { /* of the whole run's progress */
    double from, to;
    const char *stage;
};

static bool pass_over(struct campaign *campaign, const struct run_order *order,
                      const struct run_pass *pass, const int64_t *stars, size_t star_count,
                      const struct stretch *stretch, struct run_result *result,
                      struct base_error *error)
{
    struct chunk *chunk = calloc(1, sizeof *chunk);
    if (chunk == NULL)
        return no_memory(error);
    run_sum_free(&result->sum);
    run_sum_open(&result->sum);
    for (size_t i = 0; i < result->people_count; i++)
        result->shares[i] = (struct run_share){.person = (int32_t)i};
    chunk->pass = pass;
    bool ok = true;
    for (size_t done = 0; ok && done < star_count; done += STARS_AT_ONCE) {
        double part = (double)done / (double)star_count;
        size_t left = star_count - done;
        chunk->stars = stars + done;
        ok =
            tell(order, stretch->from + part * (stretch->to - stretch->from), stretch->stage,
                 error) &&
            pass_chunk(campaign, chunk, left < STARS_AT_ONCE ? left : STARS_AT_ONCE, result, error);
    }
    free(chunk);
    return ok;
}

/* ---- fits ---- */

static bool fit(struct campaign *campaign, const struct run_result *result,
                struct consensus_output *out, struct base_error *error)
{
    double *days = calloc(result->people_count > 0 ? result->people_count : 1, sizeof *days);
    if (days == NULL)
        return no_memory(error);
    for (size_t i = 0; i < result->people_count; i++)
        days[i] = result->shares[i].days;
    const struct consensus_input input = {.items = result->sum.items.items,
                                          .item_count = result->sum.items.count,
                                          .looks = result->sum.looks.items,
                                          .look_count = result->sum.looks.count,
                                          .people = result->people_count,
                                          .days_looked = days,
                                          .days_total = result->sum.days_total};
    struct consensus_settings settings = CONSENSUS_SETTINGS_DEFAULT;
    settings.pool = campaign->pool;
    bool ok = consensus_fit(&input, &settings, out, error);
    free(days);
    return ok;
}

/* What the first fit says each person's word weighs. */
static bool take_weights(const struct consensus_output *first, size_t people, double **out,
                         struct base_error *error)
{
    *out = calloc(people > 0 ? people : 1, sizeof **out);
    if (*out == NULL)
        return no_memory(error);
    for (size_t i = 0; i < people; i++)
        (*out)[i] = first->skills[i].weight;
    return true;
}

static void put_answers(struct run_result *result)
{
    struct store_candidate *candidates = result->sum.candidates.items;
    for (size_t i = 0; i < result->sum.candidates.count; i++) {
        const struct consensus_answer *answer = &result->fit.answers[i];
        candidates[i].probability = answer->probability;
        candidates[i].log_odds = answer->log_odds;
        candidates[i].marks_only_probability = answer->marks_only_probability;
        candidates[i].term_looks = answer->term_looks;
        candidates[i].term_time = answer->term_time;
        candidates[i].term_snr = answer->term_snr;
        candidates[i].term_prior = answer->term_prior;
    }
}

static bool take_people(struct campaign *campaign, struct base_arena *arena,
                        struct run_result *result, struct base_error *error)
{
    int64_t *people = NULL;
    if (!store_reviewing_people(campaign->store, arena, result->newest, &people,
                                &result->people_count, error))
        return false;
    size_t room = result->people_count > 0 ? result->people_count : 1;
    result->people = calloc(room, sizeof *result->people);
    result->shares = calloc(room, sizeof *result->shares);
    if (result->people == NULL || result->shares == NULL || result->people_count > INT32_MAX)
        return no_memory(error);
    if (result->people_count > 0)
        memcpy(result->people, people, result->people_count * sizeof *people);
    return true;
}

/* Both passes, with the weights of the first in the second. */
static bool compute(struct campaign *campaign, const struct run_order *order,
                    struct base_arena *arena, struct run_result *result, struct base_error *error)
{
    static const struct stretch first_stretch = {AT_FIRST_PASS, AT_FIRST_FIT, "grouping marks"};
    static const struct stretch second_stretch = {AT_SECOND_PASS, AT_SECOND_FIT, "measuring dips"};
    int64_t *stars = NULL;
    size_t star_count = 0;
    double *weights = NULL;
    struct consensus_output first = {0};
    if (!take_people(campaign, arena, result, error) ||
        !store_reviewed_stars(campaign->store, arena, result->newest, &stars, &star_count, error))
        return false;
    struct run_pass pass = {.store = campaign->store,
                            .newest = result->newest,
                            .people = result->people,
                            .people_count = result->people_count};
    bool ok = pass_over(campaign, order, &pass, stars, star_count, &first_stretch, result, error) &&
              tell(order, AT_FIRST_FIT, "weighing reviewers", error) &&
              fit(campaign, result, &first, error) &&
              take_weights(&first, result->people_count, &weights, error);
    if (ok) {
        result->first_rounds = first.rounds;
        pass.weights = weights;
        pass.measure = true;
        ok = pass_over(campaign, order, &pass, stars, star_count, &second_stretch, result, error) &&
             tell(order, AT_SECOND_FIT, "fitting the consensus", error) &&
             fit(campaign, result, &result->fit, error);
    }
    consensus_output_free(&first);
    free(weights);
    return ok;
}

bool run_compute(struct campaign *campaign, const struct run_order *order, int64_t newest,
                 struct run_result *out, struct base_error *error)
{
    *out = (struct run_result){.newest = newest};
    run_sum_open(&out->sum);
    struct base_arena *arena = base_arena_new(0);
    bool ok = arena != NULL ? compute(campaign, order, arena, out, error) : no_memory(error);
    if (ok) {
        put_answers(out);
        for (size_t i = 0; i < out->people_count; i++)
            out->reviews += out->shares[i].looks;
        ok = run_count_other_stars(out, error);
    }
    base_arena_free(arena);
    if (!ok)
        run_result_free(out);
    return ok;
}

void run_result_free(struct run_result *result)
{
    consensus_output_free(&result->fit);
    run_sum_free(&result->sum);
    free(result->shares);
    free(result->people);
    *result = (struct run_result){0};
}

/* ---- storing ---- */

static struct store_skill *skills_of(const struct run_result *result)
{
    struct store_skill *skills =
        calloc(result->people_count > 0 ? result->people_count : 1, sizeof *skills);
    for (size_t i = 0; skills != NULL && i < result->people_count; i++) {
        const struct consensus_skill *skill = &result->fit.skills[i];
        skills[i] = (struct store_skill){.person = result->people[i],
                                         .looks = result->shares[i].looks,
                                         .marks = result->shares[i].marks,
                                         .days_looked = result->shares[i].days,
                                         .hit = skill->hit.value,
                                         .hit_low = skill->hit.low,
                                         .hit_high = skill->hit.high,
                                         .chance = skill->chance.value,
                                         .chance_low = skill->chance.low,
                                         .chance_high = skill->chance.high,
                                         .weight = skill->weight};
    }
    return skills;
}

static bool store_result(struct campaign *campaign, const struct run_result *result,
                         int64_t begun_ms, int64_t *run, struct base_error *error)
{
    const struct campaign_settings in_force = campaign_settings_now(campaign);
    struct store_skill *skills = skills_of(result);
    char *settings = run_settings_json(&in_force), *as_fitted = run_fit_json(result);
    bool ok = (skills != NULL && settings != NULL && as_fitted != NULL) || no_memory(error);
    if (ok) {
        struct store_run_new new = {.run = {.newest_review = result->newest,
                                            .reviews = result->reviews,
                                            .people = (int64_t)result->people_count,
                                            .candidates = (int64_t)result->sum.candidates.count,
                                            .begun_ms = begun_ms,
                                            .finished_ms = base_clock_unix_ms(),
                                            .settings = settings,
                                            .fit = as_fitted},
                                    .candidates = result->sum.candidates.items,
                                    .candidate_count = result->sum.candidates.count,
                                    .members = result->sum.members.items,
                                    .member_count = result->sum.members.count,
                                    .skills = skills,
                                    .skill_count = result->people_count};
        ok = store_run_add(campaign->store, &new, error);
        *run = new.run.id;
    }
    free(as_fitted);
    free(settings);
    free(skills);
    return ok;
}

bool run_whole(struct campaign *campaign, const struct run_order *order, int64_t *run,
               struct base_error *error)
{
    int64_t begun_ms = base_clock_unix_ms(), newest = 0, count = 0;
    struct run_result result;
    if (!tell(order, 0.0, "reading reviews", error) ||
        !store_reviews_high_water(campaign->store, &newest, &count, error) ||
        !run_compute(campaign, order, newest, &result, error))
        return false;
    bool ok = tell(order, AT_STORING, "storing", error) &&
              store_result(campaign, &result, begun_ms, run, error) &&
              run_settle(campaign, &result, error);
    if (ok && order->progress != NULL)
        order->progress(order->context, 1.0, "done");
    run_result_free(&result);
    return ok;
}
