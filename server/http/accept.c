#include "accept.h"

#include <string.h>
#include <strings.h>

#define SPACE " \t"

struct span {
    const char *text;
    size_t length;
};

static struct span trimmed(const char *text, size_t length)
{
    while (length > 0 && strchr(SPACE, text[0]) != NULL) {
        text++;
        length--;
    }
    while (length > 0 && strchr(SPACE, text[length - 1]) != NULL)
        length--;
    return (struct span){text, length};
}

/* The next piece up to a separator that is not within quotes; *rest moves past it. False at the
 * end.
 */
static bool next_piece(struct span *rest, char separator, struct span *piece)
{
    if (rest->length == 0)
        return false;
    bool quoted = false;
    size_t end = 0;
    for (; end < rest->length && (quoted || rest->text[end] != separator); end++) {
        if (quoted && rest->text[end] == '\\' && end + 1 < rest->length)
            end++;
        else if (rest->text[end] == '"')
            quoted = !quoted;
    }
    *piece = trimmed(rest->text, end);
    size_t past = end < rest->length ? end + 1 : end;
    *rest = (struct span){rest->text + past, rest->length - past};
    return true;
}

static struct span whole(const char *header)
{
    return (struct span){header, strlen(header)};
}

/* A quality as thousandths: "0", "0.5", "1.000" (RFC 9110, 12.4.2); -1 when it is not one. */
static int quality_read(struct span value)
{
    if (value.length == 0 || value.length > 5 || (value.text[0] != '0' && value.text[0] != '1'))
        return -1;
    int thousandths = (value.text[0] - '0') * 1000;
    if (value.length > 1 && value.text[1] != '.')
        return -1;
    int unit = 100;
    for (size_t i = 2; i < value.length; i++, unit /= 10) {
        if (value.text[i] < '0' || value.text[i] > '9')
            return -1;
        thousandths += (value.text[i] - '0') * unit;
    }
    return thousandths > 1000 ? -1 : thousandths;
}

/* Split "type/sub;level=1;q=0.5" into what it names and its quality (1000 when none is given). */
static struct span item_name(struct span item, int *quality)
{
    struct span name = {item.text, 0}, parameter;
    *quality = 1000;
    (void)next_piece(&item, ';', &name);
    while (next_piece(&item, ';', &parameter))
        if (parameter.length >= 2 && strncasecmp(parameter.text, "q=", 2) == 0)
            *quality = quality_read((struct span){parameter.text + 2, parameter.length - 2});
    return name;
}

/* How closely a range fits a type: 3 the same, 2 its family ("text" with a star), 1 any, 0 not. */
static int closeness(struct span range, const char *type)
{
    size_t family = strcspn(type, "/");
    if (range.length == strlen(type) && strncasecmp(range.text, type, range.length) == 0)
        return 3;
    if (range.length == family + 2 && range.text[family] == '/' && range.text[family + 1] == '*' &&
        strncasecmp(range.text, type, family) == 0)
        return 2;
    if (range.length == 3 && memcmp(range.text, "*/*", 3) == 0)
        return 1;
    return 0;
}

static int type_quality(const char *header, const char *type)
{
    int best_fit = 0, quality = 0;
    struct span rest = whole(header), item;
    while (next_piece(&rest, ',', &item)) {
        int said;
        struct span range = item_name(item, &said);
        int fit = closeness(range, type);
        if (said >= 0 && fit > best_fit) {
            best_fit = fit;
            quality = said;
        }
    }
    return quality;
}

int http_accept_pick(const char *header, const char *const *types, size_t count)
{
    if (header == NULL || trimmed(header, strlen(header)).length == 0)
        return count == 0 ? -1 : 0;
    int best = -1, best_quality = 0;
    for (size_t i = 0; i < count; i++) {
        int quality = type_quality(header, types[i]);
        if (quality > best_quality) {
            best_quality = quality;
            best = (int)i;
        }
    }
    return best;
}

static bool is_word(struct span span, const char *word)
{
    return span.length == strlen(word) && strncasecmp(span.text, word, span.length) == 0;
}

bool http_accept_gzip(const char *header)
{
    if (header == NULL)
        return false;
    int named = -1, any = -1;
    struct span rest = whole(header), item;
    while (next_piece(&rest, ',', &item)) {
        int quality;
        struct span coding = item_name(item, &quality);
        if (is_word(coding, "gzip") || is_word(coding, "x-gzip"))
            named = quality;
        else if (is_word(coding, "*"))
            any = quality;
    }
    return named >= 0 ? named > 0 : any > 0;
}

bool http_etag_is_listed(const char *header, const char *etag)
{
    size_t length = strlen(etag);
    struct span rest = whole(header), item;
    while (next_piece(&rest, ',', &item)) {
        if (item.length == 1 && item.text[0] == '*')
            return true;
        if (item.length > 2 && item.text[0] == 'W' && item.text[1] == '/')
            item = (struct span){item.text + 2, item.length - 2};
        if (item.length == length && memcmp(item.text, etag, length) == 0)
            return true;
    }
    return false;
}
