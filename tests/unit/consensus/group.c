#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <stdlib.h>
#include <string.h>

#include "../../../server/consensus/group.h"

#define MOST 8000

/* Marks, and where they were put; static because they are large. */
struct sheet {
    struct consensus_mark marks[MOST];
    size_t n, sorted[MOST], group[MOST], groups, evaluations;
    size_t of[MOST]; /* group of each mark, in the order they were given */
};

static struct sheet *sheet_new(void)
{
    struct sheet *sheet = calloc(1, sizeof *sheet);
    assert_non_null(sheet);
    return sheet;
}

static void put(struct sheet *sheet, int64_t review, double starts_d, double ends_d)
{
    assert_true(sheet->n < MOST);
    sheet->marks[sheet->n] = (struct consensus_mark){.id = (int64_t)sheet->n + 1,
                                                     .review = review,
                                                     .person = (int32_t)review,
                                                     .starts_d = starts_d,
                                                     .ends_d = ends_d,
                                                     .weight = 1.0,
                                                     .sure = 1};
    sheet->n++;
}

static void group(struct sheet *sheet)
{
    struct base_error error = {0};
    assert_true(group_marks_counted(sheet->marks, sheet->n, sheet->sorted, sheet->group,
                                    &sheet->groups, &sheet->evaluations, &error));
    for (size_t i = 0; i < sheet->n; i++)
        sheet->of[sheet->sorted[i]] = sheet->group[i];
}

/* A generator of the test's own, so that every machine sees the same marks. */
static double draw(uint64_t *state)
{
    *state = *state * 6364136223846793005u + 1442695040888963407u;
    return (double)(*state >> 11) / 9007199254740992.0;
}

/* Many marks of many reviews about things at random places. */
static void scatter(struct sheet *sheet, size_t n, size_t reviews, double span_d, uint64_t seed)
{
    for (size_t i = 0; i < n; i++) {
        double starts = span_d * draw(&seed);
        put(sheet, (int64_t)(draw(&seed) * (double)reviews), starts,
            starts + 0.05 + 0.3 * draw(&seed));
    }
}

static void no_review_has_two_marks_in_one_group(const struct sheet *sheet)
{
    for (size_t i = 0; i < sheet->n; i++)
        for (size_t k = 0; k < i; k++)
            assert_false(sheet->of[i] == sheet->of[k] &&
                         sheet->marks[i].review == sheet->marks[k].review);
}

static void no_marks_make_no_groups(void **state)
{
    (void)state;
    struct sheet *sheet = sheet_new();
    group(sheet);
    assert_int_equal(sheet->groups, 0);
    free(sheet);
}

/* By hand. A = 0–4, B = 1–5, C = 3–7: IoU of A and B is 3/5, of B and C 2/6, of A and C 1/7. A and
 * B join at 0.4. Then C is at the average of 1 - 1/7 and 1 - 2/6, 0.7619, over the cut: single
 * linkage would have joined it. With C = 2–6 the average of 1 - 2/6 and 1 - 3/5 is 0.5333. */
static void average_linkage_as_worked_by_hand(void **state)
{
    (void)state;
    struct sheet *sheet = sheet_new();
    put(sheet, 1, 0.0, 4.0);
    put(sheet, 2, 1.0, 5.0);
    put(sheet, 3, 3.0, 7.0);
    group(sheet);
    assert_int_equal(sheet->groups, 2);
    assert_int_equal(sheet->of[0], 0);
    assert_int_equal(sheet->of[1], 0);
    assert_int_equal(sheet->of[2], 1);
    sheet->marks[2].starts_d = 2.0;
    sheet->marks[2].ends_d = 6.0;
    group(sheet);
    assert_int_equal(sheet->groups, 1);
    free(sheet);
}

/* Sizes count: with three marks at 0–4 and one at 2–6 (IoU 2/6), a last one at 3–7 (IoU 1/7 with
 * the three, 3/5 with the one) first joins the one; those two then are 1 - (2/6 + 1/7) / 2 = 0.762
 * from the three, so they stay apart. */
static void nearer_marks_join_first(void **state)
{
    (void)state;
    struct sheet *sheet = sheet_new();
    for (int64_t r = 1; r <= 3; r++)
        put(sheet, r, 0.0, 4.0);
    put(sheet, 4, 2.0, 6.0);
    put(sheet, 5, 3.0, 7.0);
    group(sheet);
    assert_int_equal(sheet->groups, 2);
    assert_int_equal(sheet->of[2], 0);
    assert_int_equal(sheet->of[3], 1);
    assert_int_equal(sheet->of[4], 1);
    free(sheet);
}

static void marks_that_only_touch_stay_apart(void **state)
{
    (void)state;
    struct sheet *sheet = sheet_new();
    put(sheet, 1, 0.0, 1.0);
    put(sheet, 2, 1.0, 2.0);
    group(sheet);
    assert_int_equal(sheet->groups, 2);
    free(sheet);
}

static void two_marks_of_one_review_never_share_a_group(void **state)
{
    (void)state;
    struct sheet *sheet = sheet_new();
    put(sheet, 1, 0.0, 1.0);
    put(sheet, 1, 0.0, 1.0);
    put(sheet, 2, 0.0, 1.0);
    put(sheet, 3, 0.0, 1.0);
    group(sheet);
    assert_int_equal(sheet->groups, 2);
    no_review_has_two_marks_in_one_group(sheet);
    free(sheet);
    for (uint64_t seed = 1; seed <= 5; seed++) {
        sheet = sheet_new();
        scatter(sheet, 900, 12, 3.0, seed);
        group(sheet);
        no_review_has_two_marks_in_one_group(sheet);
        free(sheet);
    }
}

static void marks_of_one_reviewer_in_two_reviews_may_join(void **state)
{
    (void)state;
    struct sheet *sheet = sheet_new();
    put(sheet, 1, 0.0, 1.0);
    put(sheet, 2, 0.0, 1.0);
    sheet->marks[0].person = sheet->marks[1].person = 7;
    group(sheet);
    assert_int_equal(sheet->groups, 1);
    free(sheet);
}

static void groups_are_numbered_by_their_starts(void **state)
{
    (void)state;
    struct sheet *sheet = sheet_new();
    scatter(sheet, 400, 400, 30.0, 3);
    group(sheet);
    size_t next = 0;
    for (size_t i = 0; i < sheet->n; i++) {
        assert_true(sheet->group[i] <= next);
        next += sheet->group[i] == next;
        if (i > 0)
            assert_true(sheet->marks[sheet->sorted[i - 1]].starts_d <=
                        sheet->marks[sheet->sorted[i]].starts_d);
    }
    assert_int_equal(next, sheet->groups);
    free(sheet);
}

static void the_order_the_marks_come_in_does_not_matter(void **state)
{
    (void)state;
    static const size_t sizes[] = {600, 2600};
    for (size_t s = 0; s < 2; s++) {
        struct sheet *one = sheet_new(), *other = sheet_new();
        scatter(one, sizes[s], 40, 4.0, 11);
        uint64_t seed = 5;
        size_t place[MOST];
        for (size_t i = 0; i < one->n; i++)
            place[i] = i;
        for (size_t i = one->n - 1; i > 0; i--) {
            size_t k = (size_t)(draw(&seed) * (double)(i + 1)), kept = place[i];
            place[i] = place[k];
            place[k] = kept;
        }
        other->n = one->n;
        for (size_t i = 0; i < one->n; i++)
            other->marks[place[i]] = one->marks[i];
        group(one);
        group(other);
        assert_int_equal(one->groups, other->groups);
        for (size_t i = 0; i < one->n; i++)
            assert_int_equal(one->of[i], other->of[place[i]]);
        free(one);
        free(other);
    }
}

/* Somebody who boxes the whole segment chains everything into one run; the rest must be grouped as
 * if that box were not there. */
static void a_box_over_everything_joins_nothing(void **state)
{
    (void)state;
    struct sheet *without = sheet_new(), *with = sheet_new();
    uint64_t seed = 21;
    for (int64_t review = 1; review <= 300; review++)
        for (int dip = 0; dip < 10; dip++) {
            double shift = 0.02 * (draw(&seed) - 0.5);
            put(without, review, 2.7 * dip + 1.0 + shift, 2.7 * dip + 1.2 + shift);
        }
    memcpy(with->marks, without->marks, sizeof with->marks);
    with->n = without->n;
    put(with, 1000, 0.0, 27.0);
    group(without);
    group(with);
    assert_int_equal(without->groups, 10);
    assert_int_equal(with->groups, 11);
    for (size_t i = 1; i < without->n; i++)
        assert_true((without->of[i] == without->of[i - 1]) == (with->of[i] == with->of[i - 1]));
    free(without);
    free(with);
}

static void five_thousand_marks_on_one_spot_are_one_group(void **state)
{
    (void)state;
    struct sheet *sheet = sheet_new();
    uint64_t seed = 8;
    for (int64_t review = 1; review <= 5000; review++) {
        double shift = 0.04 * (draw(&seed) - 0.5);
        put(sheet, review, 1.0 + shift, 1.2 + shift);
    }
    group(sheet);
    assert_int_equal(sheet->groups, 1);
    free(sheet);
}

/* The same where everybody marked it twice, so that there are two groups at least. */
static void long_runs_keep_reviews_apart_too(void **state)
{
    (void)state;
    struct sheet *sheet = sheet_new();
    uint64_t seed = 9;
    for (int64_t review = 1; review <= 1500; review++)
        for (int twice = 0; twice < 2; twice++) {
            double shift = 0.01 * (draw(&seed) - 0.5);
            put(sheet, review, 1.0 + shift, 1.2 + shift);
        }
    group(sheet);
    no_review_has_two_marks_in_one_group(sheet);
    assert_true(sheet->groups >= 2 && sheet->groups < sheet->n / 2);
    free(sheet);
}

/* Boxes in boxes, each a little smaller: a box joins those near its size and no others. */
static void nested_boxes_join_by_size(void **state)
{
    (void)state;
    struct sheet *sheet = sheet_new();
    double half = 8.0;
    for (int64_t review = 1; review <= 400; review++, half *= 0.99)
        put(sheet, review, 10.0 - half, 10.0 + half);
    group(sheet);
    assert_true(sheet->groups > 1 && sheet->groups < 20);
    for (size_t i = 1; i < sheet->n; i++)
        assert_true(sheet->of[i] >= sheet->of[i - 1]);
    free(sheet);
}

/* Whatever is drawn, four times the marks cost about four times the distances once runs are longer
 * than the limit, where every pair would be sixteen times. */
static void cost_stays_near_linear(void **state)
{
    (void)state;
    for (int kind = 0; kind < 3; kind++) {
        size_t evaluations[2];
        for (size_t large = 0; large < 2; large++) {
            struct sheet *sheet = sheet_new();
            size_t n = large ? 8000 : 2000;
            uint64_t seed = 17;
            for (size_t i = 0; i < n; i++) {
                double at = kind == 0 ? 0.02 * draw(&seed) : 20.0 * draw(&seed);
                double half = kind == 2 ? 10.0 * draw(&seed) : 0.1 + 0.01 * draw(&seed);
                put(sheet, (int64_t)i, at - half, at + half);
            }
            group(sheet);
            evaluations[large] = sheet->evaluations;
            free(sheet);
        }
        assert_true(evaluations[1] <= 6 * evaluations[0] || evaluations[1] < 6u * 2000u * 1000u);
    }
}

static void the_weighted_median_is_the_lower_middle(void **state)
{
    (void)state;
    double values[] = {5.0, 1.0, 3.0, 2.0}, even[] = {1.0, 1.0, 1.0, 1.0};
    assert_true(consensus_weighted_median(values, even, 4) == 2.0);
    double again[] = {5.0, 1.0, 3.0}, heavy[] = {10.0, 1.0, 1.0};
    assert_true(consensus_weighted_median(again, heavy, 3) == 5.0);
    double one[] = {4.0}, nothing[] = {0.0};
    assert_true(consensus_weighted_median(one, nothing, 1) == 4.0);
    double weightless[] = {3.0, 1.0, 2.0}, zeros[] = {0.0, 0.0, 0.0};
    double seen = consensus_weighted_median(weightless, zeros, 3);
    assert_true(seen >= 1.0 && seen <= 3.0);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(no_marks_make_no_groups),
        cmocka_unit_test(average_linkage_as_worked_by_hand),
        cmocka_unit_test(nearer_marks_join_first),
        cmocka_unit_test(marks_that_only_touch_stay_apart),
        cmocka_unit_test(two_marks_of_one_review_never_share_a_group),
        cmocka_unit_test(marks_of_one_reviewer_in_two_reviews_may_join),
        cmocka_unit_test(groups_are_numbered_by_their_starts),
        cmocka_unit_test(the_order_the_marks_come_in_does_not_matter),
        cmocka_unit_test(a_box_over_everything_joins_nothing),
        cmocka_unit_test(five_thousand_marks_on_one_spot_are_one_group),
        cmocka_unit_test(long_runs_keep_reviews_apart_too),
        cmocka_unit_test(nested_boxes_join_by_size),
        cmocka_unit_test(cost_stays_near_linear),
        cmocka_unit_test(the_weighted_median_is_the_lower_middle),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
