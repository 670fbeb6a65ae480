/* What to do about a kind of problem; NULL for a kind that advice.def has not. */
#ifndef API_PROBLEMS_H
#define API_PROBLEMS_H

const char *api_problem_advice(const char *kind);

#endif
