/* One star of a consensus run: who looked at what, and which marks belong together. */
#include <assert.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "run.h"

/* A review, with what is needed of it. */
struct look {
    int64_t review, segment;
    int32_t person;
    size_t curve; /* index into the star's light curves */
    double starts_d, ends_d;
};

/* A segment with its looks: looks[first … first + count - 1], ordered by person. */
struct viewed {
    int64_t segment;
    size_t curve, first, count;
    double starts_d, ends_d;
};

/* A star at work. All arrays are from the arena. */
struct star {
    const struct run_pass *pass;
    int64_t id;
    struct base_arena *arena;
    struct run_sum *out;
    struct store_light_curve *curves;
    size_t curve_count;
    struct look *by_review; /* look_count, ascending */
    struct look *looks;     /* the same by segment, person, review */
    size_t look_count;
    struct store_mark *marks; /* by id */
    size_t mark_count;
    struct viewed *viewed; /* by segment */
    size_t viewed_count;
};

static bool no_memory(struct base_error *error)
{
    (void)base_fail(error, BASE_MEMORY, "There is no memory for a star of the consensus run.");
    return false;
}

/* ---- reading ---- */

static int compare_ids(const void *a, const void *b)
{
    int64_t left = *(const int64_t *)a, right = *(const int64_t *)b;
    return (left > right) - (left < right);
}

static int32_t person_index(const struct run_pass *pass, int64_t person)
{
    const int64_t *found =
        bsearch(&person, pass->people, pass->people_count, sizeof person, compare_ids);
    return found == NULL ? -1 : (int32_t)(found - pass->people);
}

static size_t curve_index(const struct star *star, int64_t light_curve)
{
    size_t i = 0;
    while (i < star->curve_count && star->curves[i].id != light_curve)
        i++;
    return i;
}

static int compare_looks(const void *a, const void *b)
{
    const struct look *left = a, *right = b;
    if (left->segment != right->segment)
        return left->segment < right->segment ? -1 : 1;
    if (left->person != right->person)
        return left->person < right->person ? -1 : 1;
    return (left->review > right->review) - (left->review < right->review);
}

static bool read_star(struct star *star, struct base_error *error)
{
    struct store *store = star->pass->store;
    struct store_look *raw = NULL;
    if (!store_light_curves_of_star(store, star->arena, star->id, &star->curves, &star->curve_count,
                                    error) ||
        !store_star_looks(store, star->arena, star->id, star->pass->newest, &raw, &star->look_count,
                          &star->marks, &star->mark_count, error))
        return false;
    star->by_review = base_arena_take_array(star->arena, star->look_count, sizeof(struct look));
    star->looks = base_arena_take_array(star->arena, star->look_count, sizeof(struct look));
    if (star->by_review == NULL || star->looks == NULL)
        return no_memory(error);
    for (size_t i = 0; i < star->look_count; i++) {
        struct look *look = &star->by_review[i];
        *look = (struct look){.review = raw[i].review,
                              .segment = raw[i].segment,
                              .person = person_index(star->pass, raw[i].person),
                              .curve = curve_index(star, raw[i].light_curve),
                              .starts_d = raw[i].starts_d,
                              .ends_d = raw[i].ends_d};
        if (look->person < 0 || look->curve == star->curve_count)
            return base_fail(error, BASE_CORRUPT,
                             "A review names a person or a light curve that is not there.");
        star->looks[i] = *look;
    }
    if (star->look_count > 0)
        qsort(star->looks, star->look_count, sizeof(struct look), compare_looks);
    return true;
}

static const struct look *look_of_review(const struct star *star, int64_t review)
{
    const struct look *found =
        bsearch(&review, star->by_review, star->look_count, sizeof(struct look), compare_ids);
    assert(found != NULL);
    return found;
}

/* ---- who looked at what ---- */

static bool list_segments(struct star *star, struct base_error *error)
{
    star->viewed = base_arena_take_array(star->arena, star->look_count, sizeof(struct viewed));
    if (star->viewed == NULL)
        return no_memory(error);
    for (size_t i = 0; i < star->look_count; i++) {
        const struct look *look = &star->looks[i];
        if (i == 0 || look->segment != look[-1].segment)
            star->viewed[star->viewed_count++] = (struct viewed){.segment = look->segment,
                                                                 .curve = look->curve,
                                                                 .first = i,
                                                                 .starts_d = look->starts_d,
                                                                 .ends_d = look->ends_d};
        star->viewed[star->viewed_count - 1].count++;
    }
    return true;
}

static bool is_first_of_person(const struct star *star, const struct viewed *viewed, size_t i)
{
    return i == viewed->first || star->looks[i].person != star->looks[i - 1].person;
}

static bool put_segments(const struct star *star, struct base_error *error)
{
    struct run_sum *out = star->out;
    for (size_t v = 0; v < star->viewed_count; v++) {
        const struct viewed *viewed = &star->viewed[v];
        struct run_segment *segment = vector_add(&out->segments, 1);
        if (segment == NULL)
            return no_memory(error);
        *segment = (struct run_segment){.segment = viewed->segment,
                                        .light_curve = star->curves[viewed->curve].id,
                                        .first_person = out->segment_people.count,
                                        .looks = viewed->count};
        for (size_t i = viewed->first; i < viewed->first + viewed->count; i++) {
            if (!is_first_of_person(star, viewed, i))
                continue;
            int32_t *person = vector_add(&out->segment_people, 1);
            if (person == NULL)
                return no_memory(error);
            *person = star->looks[i].person;
            segment->people++;
        }
    }
    return true;
}

static bool put_shares(const struct star *star, struct base_error *error)
{
    struct run_share *shares = vector_add(&star->out->shares, star->look_count + star->mark_count);
    if (shares == NULL)
        return no_memory(error);
    for (size_t i = 0; i < star->look_count; i++)
        shares[i] =
            (struct run_share){.person = star->by_review[i].person,
                               .looks = 1,
                               .days = star->by_review[i].ends_d - star->by_review[i].starts_d};
    for (size_t i = 0; i < star->mark_count; i++)
        shares[star->look_count + i] = (struct run_share){
            .person = look_of_review(star, star->marks[i].review)->person, .marks = 1};
    return true;
}

static int compare_viewed(const void *a, const void *b)
{
    const struct viewed *left = a, *right = b;
    if (left->curve != right->curve)
        return left->curve < right->curve ? -1 : 1;
    if (left->starts_d < right->starts_d || left->starts_d > right->starts_d)
        return left->starts_d < right->starts_d ? -1 : 1;
    return (left->segment > right->segment) - (left->segment < right->segment);
}

/* Days of light curve that anybody looked at: the union of the segments of each curve. */
static bool put_days(const struct star *star, struct base_error *error)
{
    struct viewed *sorted =
        base_arena_copy(star->arena, star->viewed, star->viewed_count * sizeof *sorted);
    if (sorted == NULL)
        return no_memory(error);
    if (star->viewed_count > 0)
        qsort(sorted, star->viewed_count, sizeof *sorted, compare_viewed);
    double reached = -INFINITY;
    for (size_t i = 0; i < star->viewed_count; i++) {
        if (i == 0 || sorted[i].curve != sorted[i - 1].curve)
            reached = -INFINITY;
        double from = fmax(sorted[i].starts_d, reached);
        if (sorted[i].ends_d > from)
            star->out->days_total += sorted[i].ends_d - from;
        reached = fmax(reached, sorted[i].ends_d);
    }
    return true;
}

/* ---- groups ---- */

/* Who drew a mark; for finding the oldest mark of each. */
struct marker {
    int32_t person;
    const struct consensus_mark *mark;
};

/* The marks of one time reference while they are grouped, and room for one group's sums. */
struct grouping {
    const char *time_reference;
    struct consensus_mark *marks;
    size_t *curves; /* of each mark */
    size_t count;
    size_t *sorted, *group, groups;
    size_t *first;   /* groups + 1: where each group's members begin in `members` */
    size_t *members; /* indexes into marks, by group, then by mark id */
    double *values, *weights;
    int32_t *persons;       /* who looked */
    struct marker *markers; /* who marked */
};

static bool is_of(const struct star *star, size_t curve, const char *time_reference)
{
    return strcmp(star->curves[curve].time_reference, time_reference) == 0;
}

static bool gather_marks(const struct star *star, struct grouping *g, struct base_error *error)
{
    struct base_arena *arena = star->arena;
    g->marks = base_arena_take_array(arena, star->mark_count, sizeof *g->marks);
    g->curves = base_arena_take_array(arena, star->mark_count, sizeof *g->curves);
    g->sorted = base_arena_take_array(arena, star->mark_count, sizeof *g->sorted);
    g->group = base_arena_take_array(arena, star->mark_count, sizeof *g->group);
    g->first = base_arena_take_array(arena, star->mark_count + 1, sizeof *g->first);
    g->members = base_arena_take_array(arena, star->mark_count, sizeof *g->members);
    g->values = base_arena_take_array(arena, star->mark_count, sizeof *g->values);
    g->weights = base_arena_take_array(arena, star->mark_count, sizeof *g->weights);
    g->persons =
        base_arena_take_array(arena, star->look_count + star->mark_count, sizeof *g->persons);
    g->markers = base_arena_take_array(arena, star->mark_count, sizeof *g->markers);
    if (g->marks == NULL || g->curves == NULL || g->sorted == NULL || g->group == NULL ||
        g->first == NULL || g->members == NULL || g->values == NULL || g->weights == NULL ||
        g->persons == NULL || g->markers == NULL)
        return no_memory(error);
    for (size_t i = 0; i < star->mark_count; i++) {
        const struct store_mark *mark = &star->marks[i];
        const struct look *look = look_of_review(star, mark->review);
        if (!is_of(star, look->curve, g->time_reference))
            continue;
        g->curves[g->count] = look->curve;
        g->marks[g->count++] = (struct consensus_mark){
            .id = mark->id,
            .review = mark->review,
            .person = look->person,
            .starts_d = mark->starts_d,
            .ends_d = mark->ends_d,
            .weight = star->pass->weights == NULL ? 1.0 : star->pass->weights[look->person],
            .sure = mark->sure};
    }
    return true;
}

/* Members by group; within a group by id, because marks were gathered by id. */
static void list_members(struct grouping *g, size_t *group_of_mark)
{
    for (size_t i = 0; i < g->count; i++)
        group_of_mark[g->sorted[i]] = g->group[i];
    for (size_t i = 0; i <= g->groups; i++)
        g->first[i] = 0;
    for (size_t i = 0; i < g->count; i++)
        g->first[group_of_mark[i] + 1]++;
    for (size_t i = 0; i < g->groups; i++)
        g->first[i + 1] += g->first[i];
    size_t *at = g->sorted; /* free again: where the next member of each group goes */
    for (size_t i = 0; i < g->groups; i++)
        at[i] = g->first[i];
    for (size_t i = 0; i < g->count; i++)
        g->members[at[group_of_mark[i]]++] = i;
}

/* The members' starts or ends, and their weights; all alike where nobody's word weighs. */
static void edges(struct grouping *g, size_t group, bool ends)
{
    double sum = 0.0;
    size_t from = g->first[group], n = g->first[group + 1] - from;
    for (size_t i = 0; i < n; i++) {
        const struct consensus_mark *mark = &g->marks[g->members[from + i]];
        g->values[i] = ends ? mark->ends_d : mark->starts_d;
        g->weights[i] = mark->weight;
        sum += mark->weight;
    }
    for (size_t i = 0; i < n && !(sum > 0.0); i++)
        g->weights[i] = 1.0;
}

/* The weighted median edge and the robust scatter about it (1.4826 MAD; NAN for one mark). */
static double middle_edge(struct grouping *g, size_t group, bool ends, double *spread)
{
    size_t n = g->first[group + 1] - g->first[group];
    edges(g, group, ends);
    double middle = consensus_weighted_median(g->values, g->weights, n);
    *spread = NAN;
    if (n > 1) {
        edges(g, group, ends);
        for (size_t i = 0; i < n; i++) {
            g->values[i] = fabs(g->values[i] - middle);
            g->weights[i] = 1.0;
        }
        *spread = 1.4826 * consensus_weighted_median(g->values, g->weights, n);
    }
    return middle;
}

/* The light curve that most of the members were drawn on, the oldest of equals. */
static size_t curve_of_group(const struct star *star, const struct grouping *g, size_t group)
{
    size_t best = 0, best_count = 0;
    for (size_t c = 0; c < star->curve_count; c++) {
        size_t count = 0;
        for (size_t i = g->first[group]; i < g->first[group + 1]; i++)
            count += g->curves[g->members[i]] == c ? 1 : 0;
        if (count > best_count) {
            best = c;
            best_count = count;
        }
    }
    return best;
}

static int compare_persons(const void *a, const void *b)
{
    int32_t left = *(const int32_t *)a, right = *(const int32_t *)b;
    return (left > right) - (left < right);
}

/* Everybody whose segment covers enough of the interval, and everybody who marked, into
 * g->persons: ascending, each once. Segments that cover it are noted against the item. */
static bool list_lookers(const struct star *star, struct grouping *g, size_t group,
                         const struct store_candidate *candidate, size_t *lookers,
                         struct base_error *error)
{
    size_t n = 0;
    double least = RUN_COVER_LEAST * (candidate->ends_d - candidate->starts_d);
    for (size_t v = 0; v < star->viewed_count; v++) {
        const struct viewed *viewed = &star->viewed[v];
        double shared =
            fmin(viewed->ends_d, candidate->ends_d) - fmax(viewed->starts_d, candidate->starts_d);
        if (shared < least || !is_of(star, viewed->curve, g->time_reference))
            continue;
        struct run_cover *cover = vector_add(&star->out->covers, 1);
        if (cover == NULL)
            return no_memory(error);
        *cover = (struct run_cover){v, star->out->items.count};
        for (size_t i = viewed->first; i < viewed->first + viewed->count; i++)
            if (is_first_of_person(star, viewed, i))
                g->persons[n++] = star->looks[i].person;
    }
    for (size_t i = g->first[group]; i < g->first[group + 1]; i++)
        g->persons[n++] = g->marks[g->members[i]].person;
    qsort(g->persons, n, sizeof *g->persons, compare_persons);
    size_t kept = 0;
    for (size_t i = 0; i < n; i++)
        if (i == 0 || g->persons[i] != g->persons[i - 1])
            g->persons[kept++] = g->persons[i];
    *lookers = kept;
    return true;
}

static int compare_markers(const void *a, const void *b)
{
    const struct marker *left = a, *right = b;
    if (left->person != right->person)
        return left->person < right->person ? -1 : 1;
    return (left->mark->id > right->mark->id) - (left->mark->id < right->mark->id);
}

/* A group's marks by person, the oldest of each first. Returns how many. */
static size_t list_markers(struct grouping *g, size_t group)
{
    size_t from = g->first[group], n = g->first[group + 1] - from;
    for (size_t i = 0; i < n; i++) {
        const struct consensus_mark *mark = &g->marks[g->members[from + i]];
        g->markers[i] = (struct marker){mark->person, mark};
    }
    qsort(g->markers, n, sizeof *g->markers, compare_markers);
    return n;
}

/* Everybody's look at the group, and what is counted of them. */
static bool put_looks(const struct star *star, struct grouping *g, size_t group, size_t lookers,
                      struct store_candidate *candidate, struct base_error *error)
{
    double mid = 0.5 * (candidate->starts_d + candidate->ends_d);
    struct consensus_look *looks = vector_add(&star->out->looks, lookers);
    if (looks == NULL)
        return no_memory(error);
    size_t markers = list_markers(g, group), at = 0;
    for (size_t i = 0; i < lookers; i++) {
        looks[i] = (struct consensus_look){.person = g->persons[i]};
        while (at < markers && g->markers[at].person < g->persons[i])
            at++;
        if (at == markers || g->markers[at].person != g->persons[i])
            continue;
        const struct consensus_mark *mark = g->markers[at].mark;
        looks[i].marked = 1;
        looks[i].sure = (uint8_t)mark->sure;
        looks[i].centre_d = (float)(0.5 * (mark->starts_d + mark->ends_d) - mid);
        candidate->marks++;
    }
    candidate->looks = (int64_t)lookers;
    return true;
}

static bool put_members(const struct star *star, const struct grouping *g, size_t group,
                        int64_t candidate, struct base_error *error)
{
    size_t from = g->first[group], n = g->first[group + 1] - from;
    struct store_member *members = vector_add(&star->out->members, n);
    if (members == NULL)
        return no_memory(error);
    for (size_t i = 0; i < n; i++)
        members[i] = (struct store_member){candidate, g->marks[g->members[from + i]].id};
    return true;
}

/* A number for a time reference: FNV-1a. It only serves to count, so a collision would not matter.
 */
static uint64_t stand_in(const char *time_reference)
{
    uint64_t hash = 0xcbf29ce484222325u;
    for (const char *c = time_reference; *c != '\0'; c++)
        hash = (hash ^ (unsigned char)*c) * 0x100000001b3u;
    return hash;
}

static bool put_group(const struct star *star, struct grouping *g, size_t group,
                      struct base_error *error)
{
    const struct store_light_curve *curve = &star->curves[curve_of_group(star, g, group)];
    struct store_candidate candidate = {
        .id = g->marks[g->members[g->first[group]]].id,
        .star = star->id,
        .light_curve = curve->id,
        .mid_error_d = NAN,
        .snr = NAN,
        .depth_ppm = NAN,
        .depth_error_ppm = NAN,
        .duration_h = NAN,
        .duration_error_h = NAN,
        .ingress_fraction = NAN,
        .covered = NAN,
        .gap_distance_d = NAN,
        .asymmetry = NAN,
        .period_d = NAN,
        .period_error_d = NAN,
        .epoch_d = NAN,
        .transits = 1,
    };
    candidate.starts_d = middle_edge(g, group, false, &candidate.spread_starts_d);
    candidate.ends_d = middle_edge(g, group, true, &candidate.spread_ends_d);
    candidate.mid_d = 0.5 * (candidate.starts_d + candidate.ends_d);
    size_t lookers = 0;
    struct consensus_item item = {.first_look = star->out->looks.count,
                                  .snr = NAN,
                                  .duration_d = candidate.ends_d - candidate.starts_d,
                                  .known = CONSENSUS_FREE};
    if (!list_lookers(star, g, group, &candidate, &lookers, error) ||
        !put_looks(star, g, group, lookers, &candidate, error) ||
        !put_members(star, g, group, candidate.id, error))
        return false;
    item.looks = lookers;
    struct consensus_item *items = vector_add(&star->out->items, 1);
    struct store_candidate *candidates = vector_add(&star->out->candidates, 1);
    uint64_t *reference = vector_add(&star->out->references, 1);
    if (items == NULL || candidates == NULL || reference == NULL)
        return no_memory(error);
    *reference = stand_in(g->time_reference);
    *items = item;
    *candidates = candidate;
    return true;
}

/* Group the marks drawn in one time reference. */
static bool group_reference(const struct star *star, const char *time_reference,
                            struct base_error *error)
{
    struct grouping g = {.time_reference = time_reference};
    size_t *group_of_mark =
        base_arena_take_array(star->arena, star->mark_count, sizeof *group_of_mark);
    if (group_of_mark == NULL)
        return no_memory(error);
    if (!gather_marks(star, &g, error) ||
        !consensus_group_marks(g.marks, g.count, g.sorted, g.group, &g.groups, error))
        return false;
    list_members(&g, group_of_mark);
    bool ok = true;
    for (size_t i = 0; ok && i < g.groups; i++)
        ok = put_group(star, &g, i, error);
    return ok;
}

static bool group_marks(const struct star *star, struct base_error *error)
{
    bool ok = true;
    for (size_t c = 0; ok && c < star->curve_count; c++) {
        bool new = true;
        for (size_t i = 0; i < c; i++)
            new = new && !is_of(star, i, star->curves[c].time_reference);
        if (new)
            ok = group_reference(star, star->curves[c].time_reference, error);
    }
    return ok;
}

bool run_star(const struct run_pass *pass, int64_t star_id, struct run_sum *out,
              struct base_error *error)
{
    struct star star = {.pass = pass, .id = star_id, .out = out};
    star.arena = base_arena_new(0);
    if (star.arena == NULL)
        return no_memory(error);
    bool ok =
        read_star(&star, error) && list_segments(&star, error) && put_segments(&star, error) &&
        put_shares(&star, error) && put_days(&star, error) && group_marks(&star, error) &&
        (!pass->measure || run_measure(pass, out->candidates.items, out->items.items,
                                       out->items.count, star.curves, star.curve_count, error));
    base_arena_free(star.arena);
    return ok;
}
