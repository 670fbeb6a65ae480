#include "support.h"

#define MANY 60

/* Sixty reviews of one mark each on two stars, the second in a batch of its own. */
static void add_many(struct place *place)
{
    int64_t batch;
    bool resumed;
    must(store_batch_begin(place->store, "second", "", 3, &batch, &resumed, &error));
    must(add_star(place->store, batch, "AA-0002", 2, &error));
    must(store_batch_finish(place->store, batch, 4, &error));
    for (unsigned i = 0; i < MANY; i++) {
        char key[8];
        (void)snprintf(key, sizeof key, "k%u", i);
        struct store_review_new review = a_review(place, key, (unsigned char)i);
        review.segment += i % 3 == 0 ? 1 : 0;
        must(add_review(place->store, &review, &error));
    }
}

/* Values that tie, and some that are missing. */
static struct store_candidate candidate_of(unsigned i)
{
    int64_t star = i % 3 == 0 ? 2 : 1;
    return (struct store_candidate){.id = 1 + (int64_t)i,
                                    .star = star,
                                    .light_curve = star,
                                    .starts_d = 101.0 + i,
                                    .ends_d = 101.2 + i,
                                    .mid_d = i % 7 == 0 ? NAN : 101.1 + (i * 29) % MANY,
                                    .mid_error_d = 0.01,
                                    .probability = ((i * 17) % 20) / 20.0,
                                    .log_odds = -1.5,
                                    .marks_only_probability = 0.25,
                                    .term_looks = 1,
                                    .term_time = 2,
                                    .term_snr = 3,
                                    .term_prior = 4,
                                    .looks = i % 4,
                                    .marks = 1 + i % 2,
                                    .snr = i % 5 == 0 ? NAN : 5.0 + (i * 13) % 9,
                                    .depth_ppm = i % 5 == 0 ? NAN : 1000.0 - (i * 7) % 11,
                                    .depth_error_ppm = 5,
                                    .duration_h = 2.0 + (i * 3) % 8,
                                    .duration_error_h = 6,
                                    .ingress_fraction = 0.125,
                                    .covered = 0.875,
                                    .gap_distance_d = 1.25,
                                    .asymmetry = -0.5,
                                    .spread_starts_d = 0.03,
                                    .spread_ends_d = 0.04,
                                    .period_d = i == 2 ? 1.5 : NAN,
                                    .period_error_d = NAN,
                                    .epoch_d = NAN,
                                    .transits = 7,
                                    .other_stars = 8,
                                    .flags = 0x80000001u};
}

static int64_t add_run(struct place *place, size_t count)
{
    static struct store_candidate candidates[MANY];
    static struct store_member members[MANY];
    for (unsigned i = 0; i < count; i++) {
        candidates[i] = candidate_of(i);
        members[i] = (struct store_member){candidates[i].id, candidates[i].id};
    }
    const struct store_skill skill = {.person = place->person,
                                      .looks = MANY,
                                      .marks = 30,
                                      .days_looked = 12.5,
                                      .hit = 0.8,
                                      .hit_low = 0.7,
                                      .hit_high = NAN,
                                      .chance = NAN,
                                      .weight = 0.5};
    struct store_run_new run = {.run = {.newest_review = MANY,
                                        .reviews = MANY,
                                        .people = 1,
                                        .begun_ms = 3,
                                        .finished_ms = 4,
                                        .settings = "{\"a\":1}",
                                        .fit = "{\"b\":2}"},
                                .candidates = candidates,
                                .candidate_count = count,
                                .members = members,
                                .member_count = count,
                                .skills = &skill,
                                .skill_count = 1};
    must(store_run_add(place->store, &run, &error));
    return run.run.id;
}

static struct store_candidate_query a_query(void)
{
    return (struct store_candidate_query){.star = "", .batch = "", .verdict = "", .limit = 10};
}

static void before_any_run_there_is_nothing_and_that_is_no_error(void **state)
{
    struct place *place = *state;
    struct store_candidate_query query = a_query();
    struct store_candidate *rows, one;
    struct store_skill *skills, skill;
    struct store_run *runs, run;
    size_t count = 9;
    int64_t total = 9, current = 9;
    must(store_run_current(place->store, &current, &error));
    assert_int_equal(current, 0);
    must(store_candidates_find(place->store, place->arena, &query, &rows, &count, &total, &error));
    assert_int_equal(count, 0);
    assert_int_equal(total, 0);
    must(store_runs_list(place->store, place->arena, 0, 5, &runs, &count, &error));
    assert_int_equal(count, 0);
    must(store_skills_list(place->store, place->arena, 0, &skills, &count, &error));
    assert_int_equal(count, 0);
    must(store_person_candidates(place->store, place->arena, place->person, 5, &rows, &count,
                                 &error));
    assert_int_equal(count, 0);
    must_fail(store_skill_read(place->store, place->person, &skill, &error), BASE_NOT_FOUND);
    must_fail(store_run_read(place->store, place->arena, 1, &run, &error), BASE_NOT_FOUND);
    must_fail(store_candidate_read(place->store, place->arena, 0, 1, &one, &error), BASE_NOT_FOUND);
}

static void a_run_is_read_back_as_it_was_stored(void **state)
{
    struct place *place = *state;
    struct store_run run, *runs;
    struct store_candidate one;
    struct store_skill skill, *skills;
    size_t count;
    add_many(place);
    assert_int_equal(add_run(place, 3), 1);
    reopen(place);
    must(store_run_read(place->store, place->arena, 1, &run, &error));
    assert_int_equal(run.newest_review, MANY);
    assert_int_equal(run.candidates, 3);
    assert_int_equal(run.people, 1);
    assert_int_equal(run.begun_ms, 3);
    assert_int_equal(run.finished_ms, 4);
    assert_string_equal(run.settings, "{\"a\":1}");
    assert_string_equal(run.fit, "{\"b\":2}");
    must(store_candidate_read(place->store, place->arena, 0, 3, &one, &error));
    const struct store_candidate wanted = candidate_of(2);
    assert_string_equal(one.star_name, "RB-0001");
    assert_string_equal(one.batch_name, "first");
    assert_string_equal(one.time_reference, REFERENCE);
    assert_string_equal(one.verdict, "");
    assert_true(isnan(one.ra_deg) && one.dec_deg == 10.0);
    assert_int_equal(one.run, 1);
    assert_int_equal(one.light_curve, wanted.light_curve);
    assert_true(one.starts_d == wanted.starts_d && one.ends_d == wanted.ends_d);
    assert_true(one.mid_d == wanted.mid_d && one.mid_error_d == 0.01);
    assert_true(one.probability == wanted.probability && one.log_odds == -1.5);
    assert_true(one.marks_only_probability == 0.25 && one.term_looks == 1 && one.term_time == 2);
    assert_true(one.term_snr == 3 && one.term_prior == 4 && one.snr == wanted.snr);
    assert_true(one.depth_ppm == wanted.depth_ppm && one.depth_error_ppm == 5);
    assert_true(one.duration_h == wanted.duration_h && one.duration_error_h == 6);
    assert_true(one.ingress_fraction == 0.125 && one.covered == 0.875);
    assert_true(one.gap_distance_d == 1.25 && one.asymmetry == -0.5);
    assert_true(one.spread_starts_d == 0.03 && one.spread_ends_d == 0.04);
    assert_true(one.period_d == 1.5 && isnan(one.period_error_d) && isnan(one.epoch_d));
    assert_int_equal(one.looks, wanted.looks);
    assert_int_equal(one.marks, wanted.marks);
    assert_int_equal(one.transits, 7);
    assert_int_equal(one.other_stars, 8);
    assert_int_equal(one.flags, 0x80000001u);
    must(store_skill_read(place->store, place->person, &skill, &error));
    assert_true(skill.hit == 0.8 && skill.hit_low == 0.7 && isnan(skill.hit_high));
    must(store_skills_list(place->store, place->arena, 1, &skills, &count, &error));
    assert_int_equal(count, 1);
    assert_string_equal(skills[0].handle, "Ada");
    assert_true(skills[0].days_looked == 12.5 && skills[0].weight == 0.5);
    must(store_runs_list(place->store, place->arena, 0, 5, &runs, &count, &error));
    assert_int_equal(count, 1);
}

static void the_newest_run_is_current_and_older_ones_stay(void **state)
{
    struct place *place = *state;
    struct store_candidate_query query = a_query();
    struct store_candidate *rows;
    struct store_run *runs;
    size_t count;
    int64_t total, current;
    add_many(place);
    assert_int_equal(add_run(place, 3), 1);
    assert_int_equal(add_run(place, 5), 2);
    must(store_run_current(place->store, &current, &error));
    assert_int_equal(current, 2);
    must(store_candidates_find(place->store, place->arena, &query, &rows, &count, &total, &error));
    assert_int_equal(total, 5);
    query.run = 1;
    must(store_candidates_find(place->store, place->arena, &query, &rows, &count, &total, &error));
    assert_int_equal(total, 3);
    query.run = 3;
    must(store_candidates_find(place->store, place->arena, &query, &rows, &count, &total, &error));
    assert_int_equal(total, 0);
    must(store_runs_list(place->store, place->arena, 0, 1, &runs, &count, &error));
    assert_int_equal(runs[0].id, 2);
    must(store_runs_list(place->store, place->arena, 2, 9, &runs, &count, &error));
    assert_int_equal(count, 1);
    assert_int_equal(runs[0].id, 1);
}

/* ---- orders ---- */

static double value_of(const struct store_candidate *c, enum store_candidate_order order)
{
    switch (order) {
    case STORE_BY_PROBABILITY:
        return c->probability;
    case STORE_BY_SNR:
        return c->snr;
    case STORE_BY_DEPTH:
        return c->depth_ppm;
    case STORE_BY_DURATION:
        return c->duration_h;
    case STORE_BY_STAR:
        return c->star == 2 ? 0.0 : 1.0; /* AA-0002 before RB-0001 */
    case STORE_BY_TIME:
        return c->mid_d;
    case STORE_BY_LOOKS:
        return (double)c->looks;
    default:
        return (double)c->marks;
    }
}

/* Does a stand before b? */
static bool before(const struct store_candidate *a, const struct store_candidate *b,
                   enum store_candidate_order order, bool ascending)
{
    double x = value_of(a, order), y = value_of(b, order);
    if (isnan(x) != isnan(y))
        return isnan(y);
    if (!isnan(x) && x != y)
        return ascending ? x < y : x > y;
    return ascending ? a->id < b->id : a->id > b->id;
}

static void sort_ids(int64_t ids[MANY], enum store_candidate_order order, bool ascending)
{
    struct store_candidate all[MANY];
    for (unsigned i = 0; i < MANY; i++) {
        const struct store_candidate next = candidate_of(i);
        unsigned at = i;
        for (; at > 0 && before(&next, &all[at - 1], order, ascending); at--)
            all[at] = all[at - 1];
        all[at] = next;
    }
    for (unsigned i = 0; i < MANY; i++)
        ids[i] = all[i].id;
}

static void every_order_is_total_and_its_pages_join_without_a_seam(void **state)
{
    struct place *place = *state;
    add_many(place);
    (void)add_run(place, MANY);
    for (int order = STORE_BY_PROBABILITY; order <= STORE_BY_MARKS; order++)
        for (int ascending = 0; ascending <= 1; ascending++) {
            int64_t wanted[MANY], total;
            struct store_candidate *rows;
            size_t count, seen = 0;
            struct store_candidate_query query = a_query();
            sort_ids(wanted, (enum store_candidate_order)order, ascending == 1);
            query.order = (enum store_candidate_order)order;
            query.ascending = ascending == 1;
            query.limit = 7;
            do {
                query.offset = (int64_t)seen;
                must(store_candidates_find(place->store, place->arena, &query, &rows, &count,
                                           &total, &error));
                assert_int_equal(total, MANY);
                for (size_t i = 0; i < count; i++)
                    assert_int_equal(rows[i].id, wanted[seen + i]);
                seen += count;
            } while (count > 0);
            assert_int_equal(seen, MANY);
        }
}

static void filters_narrow_the_list_and_its_total(void **state)
{
    struct place *place = *state;
    struct store_candidate *rows;
    size_t count, likely = 0;
    int64_t total, id;
    add_many(place);
    (void)add_run(place, MANY);
    must(store_verdict_add(place->store, 1, place->person, "keep", "clear", 7, &id, &error));
    must(store_verdict_add(place->store, 2, place->person, "keep", "", 8, &id, &error));
    must(store_verdict_add(place->store, 2, place->person, "reject", "eclipses", 9, &id, &error));
    for (unsigned i = 0; i < MANY; i++)
        likely += candidate_of(i).probability >= 0.5 ? 1 : 0;
    const struct {
        double least;
        const char *star, *batch, *verdict;
        int64_t wanted;
    } cases[] = {{0, "", "", "", MANY},
                 {0.5, "", "", "", (int64_t)likely},
                 {0, "AA-0002", "", "", MANY / 3},
                 {0, "RB-0001", "", "", MANY - MANY / 3},
                 {0, "nobody", "", "", 0},
                 {0, "", "second", "", MANY / 3},
                 {0, "", "nowhere", "", 0},
                 {0, "RB-0001", "second", "", 0},
                 {0, "AA-0002", "second", "", MANY / 3},
                 {0, "", "", "keep", 1},
                 {0, "", "", "reject", 1},
                 {0, "", "", "unsure", 0},
                 {0, "", "", "none", MANY - 2},
                 {0, "RB-0001", "first", "reject", 1}};
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++)
        for (int order = STORE_BY_PROBABILITY; order <= STORE_BY_MARKS; order++) {
            const struct store_candidate_query query = {.min_probability = cases[i].least,
                                                        .star = cases[i].star,
                                                        .batch = cases[i].batch,
                                                        .verdict = cases[i].verdict,
                                                        .order = (enum store_candidate_order)order};
            must(store_candidates_find(place->store, place->arena, &query, &rows, &count, &total,
                                       &error));
            assert_int_equal(count, cases[i].wanted);
            assert_int_equal(total, cases[i].wanted);
        }
}

static void a_candidate_knows_its_marks_and_who_made_them(void **state)
{
    struct place *place = *state;
    struct store_candidate_mark *marks;
    struct store_candidate *rows;
    size_t count;
    add_many(place);
    (void)add_run(place, 10);
    must(store_candidate_marks(place->store, place->arena, 0, 4, &marks, &count, &error));
    assert_int_equal(count, 1);
    assert_int_equal(marks[0].mark.id, 4);
    assert_int_equal(marks[0].person, place->person);
    assert_string_equal(marks[0].handle, "Ada");
    assert_true(marks[0].weight == 0.5);
    assert_true(marks[0].mark.starts_d == 101.0 && marks[0].mark.sure);
    must(store_candidate_marks(place->store, place->arena, 1, 11, &marks, &count, &error));
    assert_int_equal(count, 0);
    must(store_person_candidates(place->store, place->arena, place->person, 4, &rows, &count,
                                 &error));
    assert_int_equal(count, 4);
    for (size_t i = 1; i < count; i++)
        assert_true(rows[i - 1].probability >= rows[i].probability);
    must(store_person_candidates(place->store, place->arena, 99, 4, &rows, &count, &error));
    assert_int_equal(count, 0);
}

static void the_latest_verdict_counts_and_all_are_kept(void **state)
{
    struct place *place = *state;
    struct store_verdict *verdicts;
    struct store_candidate one;
    size_t count;
    int64_t first, second;
    add_many(place);
    (void)add_run(place, 5);
    must(store_verdict_add(place->store, 2, place->person, "unsure", "", 7, &first, &error));
    must(store_verdict_add(place->store, 2, place->person, "keep", "two more", 8, &second, &error));
    must(store_verdicts_list(place->store, place->arena, 2, &verdicts, &count, &error));
    assert_int_equal(count, 2);
    assert_int_equal(verdicts[0].id, first);
    assert_string_equal(verdicts[0].verdict, "unsure");
    assert_string_equal(verdicts[1].note, "two more");
    assert_string_equal(verdicts[1].handle, "Ada");
    assert_int_equal(verdicts[1].given_ms, 8);
    (void)add_run(place, 5);
    must(store_candidate_read(place->store, place->arena, 2, 2, &one, &error));
    assert_string_equal(one.verdict, "keep");
    must_fail(store_verdict_add(place->store, 2, place->person, "perhaps", "", 8, &first, &error),
              BASE_INVALID);
    must_fail(store_verdict_add(place->store, 999, place->person, "keep", "", 8, &first, &error),
              BASE_NOT_FOUND);
}

static void a_run_that_cannot_be_stored_is_never_seen_and_its_number_is_given_again(void **state)
{
    struct place *place = *state;
    struct store_candidate broken[2] = {candidate_of(0), candidate_of(1)};
    struct store_run_new run = {.run = {.newest_review = 1, .settings = "{}", .fit = "{}"},
                                .candidates = broken,
                                .candidate_count = 2};
    struct store_candidate one;
    struct store_counts counts;
    int64_t current;
    const struct store_member member = {1, 1}, of_none = {2, 77};
    add_many(place);
    broken[1].id = 9999; /* a mark that is not there */
    must_fail(store_run_add(place->store, &run, &error), BASE_NOT_FOUND);
    assert_int_equal(run.run.id, 0);
    broken[1] = candidate_of(1);
    const struct store_member members[] = {member, of_none};
    run.members = members;
    run.member_count = 2;
    must_fail(store_run_add(place->store, &run, &error), BASE_NOT_FOUND);
    must(store_run_current(place->store, &current, &error));
    assert_int_equal(current, 0);
    must_fail(store_candidate_read(place->store, place->arena, 1, 1, &one, &error), BASE_NOT_FOUND);
    assert_int_equal(add_run(place, 3), 1);
    must(store_count(place->store, &counts, &error));
    assert_int_equal(counts.runs, 1);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        IN_PLACE(before_any_run_there_is_nothing_and_that_is_no_error),
        IN_PLACE(a_run_is_read_back_as_it_was_stored),
        IN_PLACE(the_newest_run_is_current_and_older_ones_stay),
        IN_PLACE(every_order_is_total_and_its_pages_join_without_a_seam),
        IN_PLACE(filters_narrow_the_list_and_its_total),
        IN_PLACE(a_candidate_knows_its_marks_and_who_made_them),
        IN_PLACE(the_latest_verdict_counts_and_all_are_kept),
        IN_PLACE(a_run_that_cannot_be_stored_is_never_seen_and_its_number_is_given_again),
    };
    return cmocka_run_group_tests_name("store: runs and candidates", tests, NULL, NULL);
}
