/* Writes one small table in the format named by the argument, with what could go wrong in it. */
#include <math.h>
#include <stdio.h>
#include <stdlib.h>

#include "ebbmark/export.h"

static bool to_stdout(void *context, const void *data, size_t size, struct base_error *error)
{
    (void)context;
    return fwrite(data, 1, size, stdout) == size ||
           base_fail(error, BASE_IO, "Standard output failed.");
}

int main(int argc, char **argv)
{
    static const struct export_column columns[] = {
        {"candidate", EXPORT_INTEGER, "", "meta.id;meta.main", "Number.", 0},
        {"star", EXPORT_TEXT, "", "meta.id;src", "Star's name & more <here>.", 0},
        {"ra", EXPORT_REAL, "deg", "pos.eq.ra;meta.main", "Right ascension.", 0},
        {"probability", EXPORT_REAL, "", "stat.probability", "Probability.", 6},
        {"kept", EXPORT_BOOLEAN, "", "meta.code", "Kept?", 0}};
    static const struct export_table table = {"candidates", "Dips & \"lures\".", columns, 5};
    static const struct export_fact facts[] = {{"run", "3"}, {"caution", "a < b & \"c\""}};
    const struct export_cell rows[][5] = {
        {{.integer = 9007199254740993},
         {.text = "RB-0001"},
         {.real = 123.456789012345678},
         {.real = 0.123456789},
         {.boolean = true}},
        {{.integer = -7},
         {.text = "caf\xc3\xa9, \"q\" <&>"},
         {.real = NAN},
         {.real = 1e-300},
         {.boolean = false}},
        {{.integer = 3}, {.text = "=SUM(A1)"}, {.real = 1.0 / 3.0}, {.real = 1.0}, {.null = true}},
    };
    enum export_format format;
    struct export_writer *writer = NULL;
    struct base_error error = {0};
    if (argc != 2 || !export_format_read(argv[1], &format))
        return 2;
    bool ok = export_open(&writer, format, &table, facts, 2, to_stdout, NULL, &error);
    for (size_t i = 0; ok && i < 3; i++)
        ok = export_row(writer, rows[i], &error);
    ok = ok && export_finish(writer, &error);
    export_close(writer);
    if (!ok)
        (void)fprintf(stderr, "%s\n", error.sentence);
    return ok ? 0 : 1;
}
