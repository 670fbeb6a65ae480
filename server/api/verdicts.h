/* A verdict as JSON, for those who list them. */
#ifndef API_VERDICTS_H
#define API_VERDICTS_H

#include <jansson.h>

/* `item` is a struct store_verdict. */
json_t *api_verdict(const void *item);

#endif
