/* The JSON of what several answers hold. */
#include <assert.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "call.h"
#include "ebbmark/clock.h"
#include "ebbmark/text.h"

const char *const api_role_words[] = {"reviewer", "science", "admin", NULL};
const char *const api_verdict_words[] = {"keep", "reject", "unsure", NULL};

json_t *api_number(double value)
{
    return isfinite(value) ? json_real(value) : json_null();
}

json_t *api_text(const char *text)
{
    size_t length = strlen(text);
    if (base_text_is_utf8(text, length))
        return json_stringn(text, length);
    /* A file's name may be any bytes. */
    char *mended = strdup(text);
    if (mended == NULL)
        return NULL;
    for (size_t i = 0; i < length; i++)
        if ((unsigned char)mended[i] >= 0x80)
            mended[i] = '?';
    json_t *json = json_stringn(mended, length);
    free(mended);
    return json;
}

json_t *api_text_or_null(const char *text)
{
    return text[0] == '\0' ? json_null() : api_text(text);
}

json_t *api_moment(int64_t unix_ms)
{
    char text[BASE_CLOCK_SIZE];
    return unix_ms == 0 ? json_null() : json_string(base_clock_rfc3339(text, unix_ms));
}

json_t *api_person(const struct store_person *person)
{
    assert(person->role >= STORE_REVIEWER && person->role <= STORE_ADMIN);
    return json_pack("{s:I, s:o, s:s, s:b, s:b, s:o}", "person", (json_int_t)person->id, "handle",
                     api_text(person->handle), "role", api_role_words[person->role - 1], "guest",
                     person->passphrase[0] == '\0', "credit", person->credit, "joined",
                     api_moment(person->joined_ms));
}

json_t *api_mark(const struct store_mark *mark)
{
    return json_pack("{s:o, s:o, s:o, s:o, s:s}", "starts", api_number(mark->starts_d), "ends",
                     api_number(mark->ends_d), "low", api_number(mark->low), "high",
                     api_number(mark->high), "certainty", mark->sure ? "sure" : "unsure");
}

json_t *api_rate(double value, double low, double high)
{
    return json_pack("{s:o, s:o, s:o}", "value", api_number(value), "low", api_number(low), "high",
                     api_number(high));
}

json_t *api_list(const void *items, size_t count, size_t size, json_t *(*make)(const void *item))
{
    json_t *list = json_array();
    bool ok = list != NULL;
    for (size_t i = 0; ok && i < count; i++)
        ok = json_array_append_new(list, make((const char *)items + i * size)) == 0;
    if (!ok) {
        json_decref(list);
        list = NULL;
    }
    return list;
}

json_t *api_joined(json_t *object, json_t *more)
{
    if (object == NULL || more == NULL || json_object_update(object, more) != 0) {
        json_decref(object);
        object = NULL;
    }
    json_decref(more);
    return object;
}

static json_t *cell_json(const struct export_column *column, const struct export_cell *cell)
{
    if (cell->null)
        return json_null();
    switch (column->type) {
    case EXPORT_INTEGER:
        return json_integer(cell->integer);
    case EXPORT_REAL:
        return api_number(cell->real);
    case EXPORT_TEXT:
        return cell->text == NULL ? json_null() : api_text(cell->text);
    case EXPORT_BOOLEAN:
        return json_boolean(cell->boolean);
    }
    return NULL;
}

json_t *api_cells(const struct export_table *table, const struct export_cell *cells)
{
    json_t *row = json_object();
    bool ok = row != NULL;
    for (size_t i = 0; ok && i < table->column_count; i++)
        ok = json_object_set_new(row, table->columns[i].name,
                                 cell_json(&table->columns[i], &cells[i])) == 0;
    if (!ok) {
        json_decref(row);
        row = NULL;
    }
    return row;
}

json_t *api_run(const struct store_run *run)
{
    return json_pack("{s:I, s:o, s:o, s:I, s:I, s:I, s:I}", "run", (json_int_t)run->id, "begun",
                     api_moment(run->begun_ms), "finished", api_moment(run->finished_ms), "reviews",
                     (json_int_t)run->reviews, "newest_review", (json_int_t)run->newest_review,
                     "people", (json_int_t)run->people, "candidates", (json_int_t)run->candidates);
}
