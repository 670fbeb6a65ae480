/* What is asked of the list of candidates, and the list as a table file. */
#ifndef API_CANDIDATES_H
#define API_CANDIDATES_H

#include "call.h"

struct candidates_question {
    struct store_candidate_query query; /* its run is 0 only when there is no run at all */
    struct store_run run;
};

/* Answer with the whole table, written as the client reads it. */
enum http_result candidates_answer_table(struct api_call *call,
                                         const struct candidates_question *question,
                                         enum export_format format);

#endif
