#include "cookie.h"

#include <string.h>
#include <strings.h>

/* A cookie-octet of RFC 6265: visible ASCII but for quotes, comma, semicolon, backslash. */
static bool is_cookie_octet(char c)
{
    return c > 0x20 && c < 0x7f && c != '"' && c != ',' && c != ';' && c != '\\';
}

static bool is_sound(const char *value, size_t length)
{
    if (length == 0 || length > HTTP_SECRET_MAX)
        return false;
    for (size_t i = 0; i < length; i++)
        if (!is_cookie_octet(value[i]))
            return false;
    return true;
}

bool http_cookie_find(const char *header, const char *name, const char **value, size_t *length)
{
    size_t name_length = strlen(name);
    for (const char *at = header; at != NULL;) {
        at += strspn(at, " \t");
        if (strncmp(at, name, name_length) == 0 && at[name_length] == '=') {
            const char *start = at + name_length + 1;
            size_t size = strcspn(start, ";");
            while (size > 0 && (start[size - 1] == ' ' || start[size - 1] == '\t'))
                size--;
            *value = start;
            *length = size;
            return is_sound(start, size);
        }
        at = strchr(at, ';');
        if (at != NULL)
            at++;
    }
    return false;
}

bool http_bearer_find(const char *header, const char **token, size_t *length)
{
    if (strncasecmp(header, "Bearer", 6) != 0 || header[6] != ' ')
        return false;
    const char *start = header + 6 + strspn(header + 6, " ");
    *token = start;
    *length = strlen(start);
    return is_sound(start, *length);
}
