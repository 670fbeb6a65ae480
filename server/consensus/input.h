/*
 * What both forms of the model ask of their input. Private to the room.
 */
#ifndef CONSENSUS_INPUT_H
#define CONSENSUS_INPUT_H

#include "ebbmark/consensus_model.h"

/* False (BASE_INVALID) when a group's looks or a look's reviewer are out of range. */
bool input_in_range(const struct consensus_input *input, struct base_error *error);

#endif
