/* What a run was made with and how its fit ended, as JSON that is kept with it. */
#include <jansson.h>
#include <math.h>

#include "run.h"

/* Another number here: the same reviews may give other candidates than they did before. */
#define METHOD 1

static char *dump_and_drop(json_t *object)
{
    char *text = object == NULL ? NULL : json_dumps(object, JSON_COMPACT | JSON_PRESERVE_ORDER);
    json_decref(object);
    return text;
}

char *run_settings_json(const struct campaign_settings *settings)
{
    const struct consensus_settings fit = CONSENSUS_SETTINGS_DEFAULT;
    return dump_and_drop(json_pack("{s:i,s:f,s:i,s:f,s:i,s:f,s:f}", "method", METHOD, "group_cut",
                                   CONSENSUS_GROUP_CUT, "group_run_most", CONSENSUS_GROUP_RUN_MAX,
                                   "cover_least", RUN_COVER_LEAST, "rounds_most",
                                   (int)fit.rounds_max, "tolerance", fit.tolerance, "looks_least",
                                   (double)settings->looks_least));
}

/* A number that JSON can hold; what is not one becomes null. */
static json_t *number(double value)
{
    return isfinite(value) ? json_real(value) : json_null();
}

char *run_fit_json(const struct run_result *result)
{
    return dump_and_drop(json_pack(
        "{s:o,s:o,s:I,s:b,s:I,s:I,s:I,s:o}", "prior", number(result->fit.prior), "log_likelihood",
        number(result->fit.log_likelihood), "rounds", (json_int_t)result->fit.rounds, "converged",
        result->fit.converged, "first_rounds", (json_int_t)result->first_rounds, "groups",
        (json_int_t)result->sum.items.count, "looks_at_groups", (json_int_t)result->sum.looks.count,
        "days_looked_at", number(result->sum.days_total)));
}
