#include "uri.h"

#include <stdbool.h>
#include <string.h>
#include <strings.h>

#include "ebbmark/text.h"

static int digit_value(char c)
{
    if (c >= '0' && c <= '9')
        return c - '0';
    if (c >= 'a' && c <= 'f')
        return c - 'a' + 10;
    if (c >= 'A' && c <= 'F')
        return c - 'A' + 10;
    return -1;
}

/* Decode one part or field in place. In a query a plus stands for a space (the URL Standard,
 * application/x-www-form-urlencoded). Returns what is wrong, or NULL. */
static const char *decode(char *text, bool in_query)
{
    char *to = text;
    for (const char *from = text; *from != '\0'; from++) {
        char c = *from;
        if (c == '%') {
            int high = digit_value(from[1]);
            int low = high < 0 ? -1 : digit_value(from[2]);
            if (low < 0)
                return "A percent sign in the address must be followed by two hexadecimal digits.";
            c = (char)(high * 16 + low);
            if (c == '\0')
                return "The address must not hold a NUL character.";
            from += 2;
        } else if (c == '+' && in_query) {
            c = ' ';
        }
        if (!in_query && ((unsigned char)c < 0x20 || c == 0x7f))
            return "The address must not hold control characters.";
        *to++ = c;
    }
    *to = '\0';
    return base_text_is_utf8(text, (size_t)(to - text))
               ? NULL
               : "The address is not well-formed UTF-8 once decoded.";
}

static const char *cut_path(char *path, struct http_target *out)
{
    if (path[0] != '/')
        return "The address must start with a slash.";
    if (path[1] == '\0')
        return NULL;
    for (char *part = path + 1; part != NULL;) {
        char *slash = strchr(part, '/');
        if (slash != NULL)
            *slash = '\0';
        if (out->part_count == HTTP_PARTS_MAX)
            return "The address has too many parts.";
        const char *wrong = decode(part, false);
        if (wrong != NULL)
            return wrong;
        out->parts[out->part_count++] = part;
        part = slash == NULL ? NULL : slash + 1;
    }
    return NULL;
}

static bool field_is_there(const struct http_target *target, const char *name)
{
    for (size_t i = 0; i < target->field_count; i++)
        if (strcmp(target->fields[i].name, name) == 0)
            return true;
    return false;
}

static const char *cut_query(char *query, struct http_target *out)
{
    for (char *field = query; field != NULL;) {
        char *ampersand = strchr(field, '&');
        if (ampersand != NULL)
            *ampersand = '\0';
        if (*field != '\0') {
            char *equals = strchr(field, '=');
            char *value = field + strlen(field); /* a name alone has an empty value */
            if (equals != NULL) {
                *equals = '\0';
                value = equals + 1;
            }
            const char *wrong = decode(field, true);
            if (wrong == NULL)
                wrong = decode(value, true);
            if (wrong != NULL)
                return wrong;
            if (out->field_count == HTTP_FIELDS_MAX)
                return "The query has too many fields.";
            if (field_is_there(out, field))
                return "A field of the query is there twice; give each one once.";
            out->fields[out->field_count++] = (struct http_field){field, value};
        }
        field = ampersand == NULL ? NULL : ampersand + 1;
    }
    return NULL;
}

/* Where the path starts: past the scheme and host of an absolute form. */
static char *path_of(char *text)
{
    size_t scheme = strncasecmp(text, "http://", 7) == 0    ? 7
                    : strncasecmp(text, "https://", 8) == 0 ? 8
                                                            : 0;
    return scheme == 0 ? text : text + scheme + strcspn(text + scheme, "/?");
}

const char *http_target_cut(char *text, struct http_target *out)
{
    out->part_count = 0;
    out->field_count = 0;
    char *path = path_of(text);
    char *query = strchr(path, '?');
    if (query != NULL)
        *query++ = '\0';
    const char *wrong = cut_path(path, out);
    return wrong == NULL && query != NULL ? cut_query(query, out) : wrong;
}
