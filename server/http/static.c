#include "static.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "kept.h"

#define PATH_SIZE 256

struct entry {
    const char *path;
    struct http_kept_body *body;
};

struct http_statics {
    size_t count;
    struct entry entries[]; /* sorted by path */
};

static int by_path(const void *left, const void *right)
{
    return strcmp(((const struct entry *)left)->path, ((const struct entry *)right)->path);
}

bool http_statics_make(const struct http_static_file *files, size_t count,
                       struct http_statics **out, struct base_error *error)
{
    struct http_statics *statics = calloc(1, sizeof *statics + count * sizeof(struct entry));
    bool ok = statics != NULL;
    for (size_t i = 0; ok && i < count; i++) {
        /* Modules import each other by fixed names, so a browser must ask whether they changed. */
        struct http_kept_body *body = http_kept_borrow(&files[i], "no-cache");
        ok = body != NULL;
        if (ok)
            statics->entries[statics->count++] = (struct entry){files[i].path, body};
    }
    if (ok) {
        qsort(statics->entries, statics->count, sizeof(struct entry), by_path);
    } else {
        (void)base_fail(error, BASE_MEMORY, "There is no memory for the pages.");
        http_statics_free(statics);
        statics = NULL;
    }
    *out = statics;
    return ok;
}

void http_statics_free(struct http_statics *statics)
{
    if (statics == NULL)
        return;
    for (size_t i = 0; i < statics->count; i++)
        http_kept_drop(statics->entries[i].body);
    free(statics);
}

static struct http_kept_body *look_up(const struct http_statics *statics, const char *path)
{
    const struct entry key = {.path = path};
    const struct entry *found =
        bsearch(&key, statics->entries, statics->count, sizeof(struct entry), by_path);
    return found == NULL ? NULL : found->body;
}

struct http_kept_body *http_statics_find(const struct http_statics *statics,
                                         const struct http_target *target)
{
    if (target->part_count == 0)
        return look_up(statics, "/index.html");
    char path[PATH_SIZE];
    size_t used = 0;
    for (size_t i = 0; i < target->part_count; i++) {
        /* A slash that was written as %2F must not become one between parts. */
        if (strchr(target->parts[i], '/') != NULL)
            return NULL;
        int wrote = snprintf(path + used, sizeof path - used, "/%s", target->parts[i]);
        if (wrote < 0 || (size_t)wrote >= sizeof path - used - sizeof ".html")
            return NULL;
        used += (size_t)wrote;
    }
    struct http_kept_body *body = look_up(statics, path);
    if (body != NULL)
        return body;
    (void)snprintf(path + used, sizeof path - used, ".html");
    return look_up(statics, path);
}
