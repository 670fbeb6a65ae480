#include "input.h"

bool input_in_range(const struct consensus_input *input, struct base_error *error)
{
    for (size_t i = 0; i < input->item_count; i++)
        if (input->items[i].first_look > input->look_count ||
            input->items[i].looks > input->look_count - input->items[i].first_look)
            return base_fail(error, BASE_INVALID, "The looks of group %zu are out of range.", i);
    for (size_t i = 0; i < input->look_count; i++)
        if (input->looks[i].person < 0 || (size_t)input->looks[i].person >= input->people)
            return base_fail(error, BASE_INVALID, "The reviewer of look %zu is out of range.", i);
    return true;
}
