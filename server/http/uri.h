/* The target of a request ("/api/v1/stars/RB-0001?limit=5") cut into decoded parts and fields. */
#ifndef HTTP_URI_H
#define HTTP_URI_H

#include <stddef.h>

#define HTTP_PARTS_MAX 12
#define HTTP_FIELDS_MAX 32

struct http_field {
    const char *name, *value;
};

/* Everything points into the text that was cut. */
struct http_target {
    const char *parts[HTTP_PARTS_MAX]; /* between slashes, decoded; none for "/" */
    size_t part_count;
    struct http_field fields[HTTP_FIELDS_MAX]; /* of the query, decoded, no name twice */
    size_t field_count;
};

/* Cut `text` in place. Takes origin form and absolute form (RFC 9112, 3.2). NULL when it is sound;
 * else a sentence that says what is wrong with it: a percent sign without two digits, a NUL or
 * control character, not UTF-8, too many parts or fields, a field given twice. */
const char *http_target_cut(char *text, struct http_target *out);

#endif
