/*
 * Which segments need no more looks. A segment settles once it has looks_least looks, every group
 * on it is decided one way or the other, and hardly any dip can be expected there that nobody
 * marked. Where a later run is in doubt again, the segment opens again.
 */
#include <stdlib.h>

#include "run.h"

/* From the design: a group below or above these is decided, and so many unmarked dips may be
 * left. */
#define DECIDED_BELOW 0.02
#define DECIDED_ABOVE 0.98
#define UNMARKED_MOST 0.01

/* Light curves of batches that are handed out. */
static bool ready_batches(struct campaign *campaign, struct base_arena *arena,
                          struct store_batch **out, size_t *count, struct base_error *error)
{
    size_t all = 0;
    *count = 0;
    if (!store_batches_list(campaign->store, arena, out, &all, error))
        return false;
    for (size_t i = 0; i < all; i++)
        if ((*out)[i].state == STORE_BATCH_READY)
            (*out)[(*count)++] = (*out)[i];
    return true;
}

static bool is_ready(const struct store_batch *batches, size_t count, int64_t batch)
{
    for (size_t i = 0; i < count; i++)
        if (batches[i].id == batch)
            return true;
    return false;
}

/* Mark the segments that hold a group in doubt. */
static bool *list_doubts(const struct run_result *result)
{
    bool *doubts = calloc(result->sum.segments.count + 1, sizeof *doubts);
    const struct run_cover *covers = result->sum.covers.items;
    const struct store_candidate *candidates = result->sum.candidates.items;
    for (size_t i = 0; doubts != NULL && i < result->sum.covers.count; i++) {
        double p = candidates[covers[i].item].probability;
        if (p >= DECIDED_BELOW && p <= DECIDED_ABOVE)
            doubts[covers[i].segment] = true;
    }
    return doubts;
}

/* Dips a segment may be expected to hold: what was found, over the segments looked at. */
static double dips_a_segment(const struct run_result *result)
{
    double dips = 0.0;
    const struct store_candidate *candidates = result->sum.candidates.items;
    for (size_t i = 0; i < result->sum.candidates.count; i++)
        dips += candidates[i].probability;
    return result->sum.segments.count > 0 ? dips / (double)result->sum.segments.count : 0.0;
}

/* Dips on the segment that all who looked would have missed. */
static double expected_unmarked(const struct run_result *result, const struct run_segment *segment,
                                double dips)
{
    const int32_t *people = result->sum.segment_people.items;
    double missed = dips;
    for (size_t i = 0; i < segment->people; i++) {
        double hit = result->fit.skills[people[segment->first_person + i]].hit.value;
        if (hit > 0.0)
            missed *= hit < 1.0 ? 1.0 - hit : 0.0;
    }
    return missed;
}

/* What changes: segments in the queue that are done, and such as are not in it but in doubt. */
struct change {
    struct vector settle, reopen; /* int64_t */
};

static bool note(struct vector *list, int64_t segment, struct base_error *error)
{
    int64_t *at = vector_add(list, 1);
    if (at == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory to settle segments.");
    *at = segment;
    return true;
}

static bool decide(struct campaign *campaign, const struct run_result *result,
                   struct change *change, struct base_error *error)
{
    int64_t looks_least = campaign_settings_now(campaign).looks_least;
    const struct run_segment *segments = result->sum.segments.items;
    double dips = dips_a_segment(result);
    bool *doubts = list_doubts(result);
    bool ok = doubts != NULL;
    if (!ok)
        (void)base_fail(error, BASE_MEMORY, "There is no memory to settle segments.");
    for (size_t i = 0; ok && i < result->sum.segments.count; i++) {
        const struct run_segment *segment = &segments[i];
        bool done = (int64_t)segment->looks >= looks_least && !doubts[i] &&
                    expected_unmarked(result, segment, dips) < UNMARKED_MOST;
        bool open = handout_is_open(campaign->handout, segment->segment);
        if (done && open)
            ok = note(&change->settle, segment->segment, error);
        else if (!done && !open)
            ok = note(&change->reopen, segment->segment, error);
    }
    free(doubts);
    return ok;
}

/* Of the segments to open again, keep those whose batch is still handed out and that are settled:
 * others are closed for another reason. */
static bool keep_settled(struct campaign *campaign, struct vector *reopen, struct base_error *error)
{
    struct base_arena *arena = base_arena_new(0);
    if (arena == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory to settle segments.");
    struct store_batch *batches = NULL;
    size_t batch_count = 0, kept = 0;
    int64_t *ids = reopen->items;
    bool ok = ready_batches(campaign, arena, &batches, &batch_count, error);
    for (size_t i = 0; ok && i < reopen->count; i++) {
        struct store_segment segment;
        ok = store_segment_by_id(campaign->store, arena, ids[i], &segment, error);
        if (ok && !segment.open && is_ready(batches, batch_count, segment.batch))
            ids[kept++] = ids[i];
    }
    reopen->count = kept;
    base_arena_free(arena);
    return ok;
}

static bool carry_out(struct campaign *campaign, struct change *change, struct base_error *error)
{
    if (change->settle.count > 0) {
        if (!store_segments_settle(campaign->store, change->settle.items, change->settle.count,
                                   true, error))
            return false;
        handout_settle(campaign->handout, change->settle.items, change->settle.count);
    }
    if (change->reopen.count == 0)
        return true;
    if (!keep_settled(campaign, &change->reopen, error))
        return false;
    return change->reopen.count == 0 ||
           (store_segments_settle(campaign->store, change->reopen.items, change->reopen.count,
                                  false, error) &&
            handout_refresh(campaign->handout, error));
}

bool run_settle(struct campaign *campaign, const struct run_result *result,
                struct base_error *error)
{
    struct change change = {VECTOR_OF(int64_t), VECTOR_OF(int64_t)};
    bool ok = decide(campaign, result, &change, error) && carry_out(campaign, &change, error);
    vector_free(&change.settle);
    vector_free(&change.reopen);
    return ok;
}
