#include "ebbmark/consensus_model.h"

#include <stdlib.h>

void consensus_output_free(struct consensus_output *output)
{
    free(output->answers);
    free(output->skills);
    *output = (struct consensus_output){0};
}

bool consensus_fit(const struct consensus_input *input, const struct consensus_settings *settings,
                   struct consensus_output *output, struct base_error *error)
{
    return consensus_fit_two_class(input, settings, output, error);
}
