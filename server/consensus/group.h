/*
 * Grouping with a count of its work. Private to the room and its tests.
 */
#ifndef CONSENSUS_GROUP_INSIDE_H
#define CONSENSUS_GROUP_INSIDE_H

#include "ebbmark/consensus_group.h"

/* consensus_group_marks, which also says how many distances between marks or groups it computed. */
bool group_marks_counted(const struct consensus_mark *marks, size_t n, size_t *sorted,
                         size_t *group, size_t *groups, size_t *evaluations,
                         struct base_error *error);

#endif
