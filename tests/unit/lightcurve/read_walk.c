#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <archive.h>
#include <archive_entry.h>
#include <fcntl.h>
#include <sys/stat.h>
#include <unistd.h>

#include "lightcurve/read_support.h"

#define CSV "time,flux\n1,2\n"

/* A folder of its own for each test. */
struct place {
    char folder[64];
};

static int make_place(void **state)
{
    struct place *place = calloc(1, sizeof *place);
    (void)snprintf(place->folder, sizeof place->folder, "/tmp/ebbmark-walk-XXXXXX");
    *state = place;
    return place == NULL || mkdtemp(place->folder) == NULL;
}

static int remove_place(void **state)
{
    struct place *place = *state;
    char command[128];
    (void)snprintf(command, sizeof command, "rm -rf '%s'", place->folder);
    int status = system(command);
    free(place);
    return status;
}

static const char *path_in(const struct place *place, const char *name, char path[200])
{
    (void)snprintf(path, 200, "%s/%s", place->folder, name);
    return path;
}

static void write_bytes(const struct place *place, const char *name, const void *data, size_t size)
{
    char path[200];
    FILE *file = fopen(path_in(place, name, path), "wb");
    assert_non_null(file);
    assert_int_equal(fwrite(data, 1, size, file), size);
    assert_int_equal(fclose(file), 0);
}

static void write_text(const struct place *place, const char *name, const char *text)
{
    write_bytes(place, name, text, strlen(text));
}

/* What a walk told: one line a file, "label = first line" or "label ! reason". */
struct told {
    struct base_text text;
    size_t files, stop_after;
};

static bool note(void *context, const char *label, const void *data, size_t size,
                 const struct base_error *reason)
{
    struct told *told = context;
    base_text_add(&told->text, label);
    if (data == NULL) {
        base_text_add_format(&told->text, " ! %s\n", reason->sentence);
    } else {
        base_text_add(&told->text, " = ");
        const char *line_end = memchr(data, '\n', size);
        size_t length = line_end == NULL ? size : (size_t)(line_end - (const char *)data);
        base_text_add_bytes(&told->text, data, length);
        base_text_add(&told->text, "\n");
    }
    return ++told->files != told->stop_after;
}

/* Walk a path in the place and return what was told, with the place's own path cut out. */
static char *walk(const struct place *place, const char *name)
{
    char path[200];
    struct told told = {0};
    struct base_error error = {0};
    size_t files = 0;
    uint64_t bytes = 0;
    if (!lightcurve_walk(path_in(place, name, path), note, &told, &error))
        fail_msg("%s", error.sentence);
    assert_true(lightcurve_walk_count(path, &files, &bytes, &error));
    if (files != told.files)
        fail_msg("%zu files are counted and %zu are visited", files, told.files);
    base_text_add(&told.text, "");
    size_t cut = strlen(place->folder) + 1;
    for (char *at = told.text.data; (at = strstr(at, place->folder)) != NULL;)
        memmove(at, at + cut, strlen(at + cut) + 1);
    return told.text.data;
}

static void check_walk(const struct place *place, const char *name, const char *wanted)
{
    char *told = walk(place, name);
    assert_string_equal(told, wanted);
    free(told);
}

enum entry_kind { FILE_ENTRY, FOLDER_ENTRY, LINK_ENTRY, HARD_LINK_ENTRY, PIPE_ENTRY };
struct entry {
    const char *path;
    const char *text;
    enum entry_kind kind;
};

static void write_archive(const struct place *place, const char *name, bool zip, bool packed,
                          const struct entry *entries, size_t count)
{
    char path[200];
    struct archive *archive = archive_write_new();
    assert_int_equal(zip ? archive_write_set_format_zip(archive)
                         : archive_write_set_format_pax_restricted(archive),
                     ARCHIVE_OK);
    if (packed)
        assert_int_equal(archive_write_add_filter_gzip(archive), ARCHIVE_OK);
    assert_int_equal(archive_write_open_filename(archive, path_in(place, name, path)), ARCHIVE_OK);
    for (size_t i = 0; i < count; i++) {
        static const unsigned types[] = {AE_IFREG, AE_IFDIR, AE_IFLNK, AE_IFREG, AE_IFIFO};
        struct archive_entry *entry = archive_entry_new();
        archive_entry_set_pathname(entry, entries[i].path);
        archive_entry_set_filetype(entry, types[entries[i].kind]);
        archive_entry_set_perm(entry, 0644);
        size_t size = entries[i].kind == FILE_ENTRY ? strlen(entries[i].text) : 0;
        archive_entry_set_size(entry, (la_int64_t)size);
        if (entries[i].kind == LINK_ENTRY)
            archive_entry_set_symlink(entry, entries[i].text);
        if (entries[i].kind == HARD_LINK_ENTRY)
            archive_entry_set_hardlink(entry, entries[i].text);
        /* A warning says that the name is no ASCII. */
        assert_true(archive_write_header(archive, entry) >= ARCHIVE_WARN);
        assert_int_equal(archive_write_data(archive, entries[i].text, size), size);
        archive_entry_free(entry);
    }
    assert_int_equal(archive_write_close(archive), ARCHIVE_OK);
    assert_int_equal(archive_write_free(archive), ARCHIVE_OK);
}

static unsigned char *read_back(const struct place *place, const char *name, size_t *size)
{
    char path[200];
    FILE *file = fopen(path_in(place, name, path), "rb");
    assert_non_null(file);
    (void)fseek(file, 0, SEEK_END);
    *size = (size_t)ftell(file);
    rewind(file);
    unsigned char *data = malloc(*size);
    assert_int_equal(fread(data, 1, *size, file), *size);
    (void)fclose(file);
    return data;
}

static void a_folder_is_walked_in_the_order_of_its_names(void **state)
{
    struct place *place = *state;
    char path[200];
    assert_int_equal(mkdir(path_in(place, "f", path), 0700), 0);
    assert_int_equal(mkdir(path_in(place, "f/b", path), 0700), 0);
    assert_int_equal(mkdir(path_in(place, "f/.hidden", path), 0700), 0);
    write_text(place, "f/c.csv", "third");
    write_text(place, "f/a.csv", "first");
    write_text(place, "f/b/z.csv", "second");
    write_text(place, "f/.x.csv", "never");
    write_text(place, "f/.hidden/y.csv", "never");
    write_text(place, "f/README.md", "never");
    check_walk(place, "f", "f/a.csv = first\nf/b/z.csv = second\nf/c.csv = third\n");
    check_walk(place, "f/c.csv", "f/c.csv = third\n");
}

static void links_pipes_and_devices_in_a_folder_are_passed_over(void **state)
{
    struct place *place = *state;
    char path[200], other[200];
    assert_int_equal(mkdir(path_in(place, "f", path), 0700), 0);
    write_text(place, "outside.csv", "outside");
    assert_int_equal(symlink(path_in(place, "outside.csv", other), path_in(place, "f/l.csv", path)),
                     0);
    assert_int_equal(symlink(place->folder, path_in(place, "f/up", path)), 0);
    assert_int_equal(mkfifo(path_in(place, "f/pipe.csv", path), 0600), 0);
    write_text(place, "f/a.csv", "inside");
    check_walk(place, "f", "f/a.csv = inside\n");
    check_walk(place, "f/l.csv", "f/l.csv = outside\n"); /* a link that was named is followed */
}

static void folders_too_deep_are_told_of(void **state)
{
    struct place *place = *state;
    int at = open(place->folder, O_RDONLY | O_DIRECTORY);
    for (int i = 0; i < 40; i++) {
        assert_int_equal(mkdirat(at, "d", 0700), 0);
        int next = openat(at, "d", O_RDONLY | O_DIRECTORY);
        (void)close(at);
        at = next;
    }
    (void)close(at);
    char *told = walk(place, "d");
    assert_non_null(strstr(told, "Folders lie more than 32 deep"));
    free(told);
}

static void a_path_that_cannot_be_read_is_an_error(void **state)
{
    struct place *place = *state;
    char path[200];
    struct told told = {0};
    struct base_error error;
    assert_fails(lightcurve_walk(path_in(place, "none.csv", path), note, &told, &error), error,
                 BASE_NOT_FOUND, "none.csv");
    assert_int_equal(mkfifo(path_in(place, "pipe", path), 0600), 0);
    assert_fails(lightcurve_walk(path, note, &told, &error), error, BASE_INVALID,
                 "is not a regular file");
    assert_int_equal(told.files, 0);
}

static void check_archive(const struct place *place, const char *name, bool zip, bool packed)
{
    const struct entry entries[] = {{"field/", "", FOLDER_ENTRY},
                                    {"field/RB-1.csv", "one", FILE_ENTRY},
                                    {"./RB-2.csv", "two", FILE_ENTRY},
                                    {"README", "never", FILE_ENTRY},
                                    {".hidden/c", "never", FILE_ENTRY},
                                    {"field/.d", "never", FILE_ENTRY},
                                    {"l.csv", "/etc/passwd", LINK_ENTRY},
                                    {"field/empty.csv", "", FILE_ENTRY},
                                    {"Sm\xc3\xb8rbukk.csv", "three", FILE_ENTRY}};
    char wanted[600];
    write_archive(place, name, zip, packed, entries, sizeof entries / sizeof entries[0]);
    (void)snprintf(wanted, sizeof wanted,
                   "%s: field/RB-1.csv = one\n%s: ./RB-2.csv = two\n%s: field/empty.csv = \n"
                   "%s: Sm\xc3\xb8rbukk.csv = three\n",
                   name, name, name, name);
    check_walk(place, name, wanted);
}

static void archives_are_walked_whatever_they_are_called(void **state)
{
    struct place *place = *state;
    check_archive(place, "a.zip", true, false);
    check_archive(place, "a.tar", false, false);
    check_archive(place, "a.tar.gz", false, true);
    check_archive(place, "night", false, true);
}

static void an_archive_in_a_folder_is_walked_too(void **state)
{
    struct place *place = *state;
    char path[200];
    const struct entry entries[] = {{"RB-1.csv", "one", FILE_ENTRY}};
    assert_int_equal(mkdir(path_in(place, "f", path), 0700), 0);
    write_archive(place, "f/n.zip", true, false, entries, 1);
    write_text(place, "f/z.csv", "two");
    check_walk(place, "f", "f/n.zip: RB-1.csv = one\nf/z.csv = two\n");
}

static void unsafe_paths_in_an_archive_are_refused_and_the_rest_is_read(void **state)
{
    struct place *place = *state;
    const struct entry entries[] = {{"../up.csv", "x", FILE_ENTRY},
                                    {"/etc/abs.csv", "x", FILE_ENTRY},
                                    {"a/../../b.csv", "x", FILE_ENTRY},
                                    {"..\\w.csv", "x", FILE_ENTRY},
                                    {"a..b.csv", "good", FILE_ENTRY}};
    static const char *const names[] = {"a.zip", "a.tar"};
    for (int i = 0; i < 2; i++) {
        write_archive(place, names[i], i == 0, false, entries, 5);
        char *told = walk(place, names[i]);
        size_t unsafe = 0;
        for (const char *at = told; (at = strstr(at, "The entry's path is unsafe")) != NULL; at++)
            unsafe++;
        assert_int_equal(unsafe, 4);
        assert_non_null(strstr(told, "a..b.csv = good"));
        free(told);
    }
}

static void hard_links_and_pipes_in_an_archive_are_passed_over(void **state)
{
    struct place *place = *state;
    const struct entry entries[] = {{"a.csv", "one", FILE_ENTRY},
                                    {"b.csv", "a.csv", HARD_LINK_ENTRY},
                                    {"p.csv", "", PIPE_ENTRY}};
    write_archive(place, "a.tar", false, false, entries, 3);
    check_walk(place, "a.tar", "a.tar: a.csv = one\n");
}

static void an_archive_cut_short_anywhere_ends_with_a_reason(void **state)
{
    struct place *place = *state;
    static const char *const names[] = {"a.zip", "a.tar", "a.tgz"};
    struct entry entries[2] = {{"a.csv", NULL, FILE_ENTRY}, {"b.csv", NULL, FILE_ENTRY}};
    struct base_text text = {0};
    for (int i = 0; i < 300; i++)
        base_text_add_format(&text, "%d,%d\n", i * 7919 % 1009, i * 104729 % 4001);
    entries[0].text = entries[1].text = text.data;
    for (int i = 0; i < 3; i++) {
        size_t size = 0;
        write_archive(place, names[i], i == 0, i == 2, entries, 2);
        unsigned char *data = read_back(place, names[i], &size);
        /* What follows the entries (a zip's directory, a tar's end mark) can be done without. */
        unsigned char *directory = memmem(data, size, "PK\x01\x02", 4);
        size_t needed = i == 0   ? (size_t)(directory - data)
                        : i == 1 ? 2 * (512 + 512 * ((text.length + 511) / 512))
                                 : size;
        for (size_t length = 600; length < needed; length += 97) {
            char path[200];
            struct told told = {0};
            struct base_error error = {0};
            write_bytes(place, "cut", data, length);
            assert_true(lightcurve_walk(path_in(place, "cut", path), note, &told, &error));
            bool reasoned = told.text.data != NULL && strstr(told.text.data, " ! ") != NULL;
            if (!reasoned)
                fail_msg("%s cut to %zu of %zu bytes: %s", names[i], length, size, told.text.data);
            base_text_free(&told.text);
        }
        free(data);
    }
    base_text_free(&text);
}

static void a_damaged_entry_does_not_stop_the_others(void **state)
{
    struct place *place = *state;
    size_t size = 0;
    struct base_text text = {0};
    for (int i = 0; i < 300; i++)
        base_text_add_format(&text, "%d,%d\n", i * 7919 % 1009, i * 104729 % 4001);
    const struct entry entries[] = {{"a.csv", text.data, FILE_ENTRY},
                                    {"b.csv", "good", FILE_ENTRY}};
    write_archive(place, "a.zip", true, false, entries, 2);
    unsigned char *data = read_back(place, "a.zip", &size);
    for (size_t i = 300; i < 400; i++)
        data[i] ^= 0x55;
    write_bytes(place, "a.zip", data, size);
    char *told = walk(place, "a.zip");
    assert_non_null(strstr(told, "a.zip: a.csv ! The archive is truncated or damaged"));
    assert_non_null(strstr(told, "a.zip: b.csv = good"));
    free(told);
    free(data);
    base_text_free(&text);
}

static void an_archive_in_an_archive_is_refused(void **state)
{
    struct place *place = *state;
    char path[200];
    size_t size = 0;
    const struct entry entries[] = {{"a.csv", "one", FILE_ENTRY}};
    write_archive(place, "inner.zip", true, false, entries, 1);
    unsigned char *data = read_back(place, "inner.zip", &size);
    struct archive *archive = archive_write_new();
    assert_int_equal(archive_write_set_format_ustar(archive), ARCHIVE_OK);
    assert_int_equal(archive_write_open_filename(archive, path_in(place, "outer.tar", path)), 0);
    struct archive_entry *entry = archive_entry_new();
    archive_entry_set_pathname(entry, "inner.zip");
    archive_entry_set_filetype(entry, AE_IFREG);
    archive_entry_set_size(entry, (la_int64_t)size);
    assert_int_equal(archive_write_header(archive, entry), ARCHIVE_OK);
    assert_int_equal(archive_write_data(archive, data, size), size);
    archive_entry_free(entry);
    (void)archive_write_free(archive);
    check_walk(place, "outer.tar",
               "outer.tar: inner.zip ! An archive inside an archive is not unpacked.\n");
    free(data);
}

/* 80 MiB of zeros in one entry, whether it is wanted or passed over. */
static void a_bomb_is_refused_whether_its_entry_is_wanted_or_not(void **state)
{
    struct place *place = *state;
    size_t size = 80u << 20;
    char *zeros = malloc(size + 1);
    memset(zeros, '0', size);
    zeros[size] = '\0';
    for (int i = 0; i < 2; i++) {
        const struct entry entries[] = {{i == 0 ? "a.csv" : ".a.csv", zeros, FILE_ENTRY},
                                        {"b.csv", "one", FILE_ENTRY}};
        write_archive(place, "a.tar.gz", false, true, entries, 2);
        char path[200];
        struct told told = {0};
        struct base_error error = {0};
        assert_true(lightcurve_walk(path_in(place, "a.tar.gz", path), note, &told, &error));
        assert_int_equal(told.files, 1);
        assert_non_null(strstr(told.text.data, "more than 200 times its packed size"));
        base_text_free(&told.text);
    }
    free(zeros);
}

static void a_visitor_can_stop_the_walk(void **state)
{
    struct place *place = *state;
    char path[200];
    const struct entry entries[] = {{"a.csv", "one", FILE_ENTRY}, {"b.csv", "two", FILE_ENTRY}};
    assert_int_equal(mkdir(path_in(place, "f", path), 0700), 0);
    write_archive(place, "f/n.zip", true, false, entries, 2);
    write_text(place, "f/z.csv", "three");
    struct told told = {.stop_after = 1};
    struct base_error error;
    assert_fails(lightcurve_walk(path_in(place, "f", path), note, &told, &error), error,
                 BASE_CANCELLED, "was stopped");
    assert_int_equal(told.files, 1);
    base_text_free(&told.text);
}

static void a_count_knows_the_bytes_that_a_walk_will_visit(void **state)
{
    struct place *place = *state;
    char path[200];
    const struct entry entries[] = {{"a.csv", "12345", FILE_ENTRY}, {"README", "no", FILE_ENTRY}};
    size_t files = 0;
    uint64_t bytes = 0;
    assert_int_equal(mkdir(path_in(place, "f", path), 0700), 0);
    write_archive(place, "f/n.tar.gz", false, true, entries, 2);
    write_text(place, "f/z.csv", "1234567");
    assert_true(lightcurve_walk_count(path_in(place, "f", path), &files, &bytes, NULL));
    assert_int_equal(files, 2);
    assert_int_equal(bytes, 12);
}

static void names_that_are_no_text_are_shown_without_their_bytes(void **state)
{
    struct place *place = *state;
    char path[200];
    assert_int_equal(mkdir(path_in(place, "f", path), 0700), 0);
    write_text(place, "f/a\x1b[31m.csv", "one");
    write_text(place, "f/b\xff.csv", "two");
    check_walk(place, "f", "f/a?[31m.csv = one\nf/b?.csv = two\n");
}

static void a_folder_is_read_from_end_to_end(void **state)
{
    struct place *place = *state;
    char path[200];
    struct told told = {0};
    assert_int_equal(mkdir(path_in(place, "f", path), 0700), 0);
    for (int i = 0; i < 300; i++) {
        char name[32];
        (void)snprintf(name, sizeof name, "f/RB-%04d.csv", i);
        write_text(place, name, CSV);
    }
    assert_true(lightcurve_walk(path_in(place, "f", path), note, &told, NULL));
    assert_int_equal(told.files, 300);
    base_text_free(&told.text);
}

static bool read_catalogue(struct place *place, const char *text, struct lightcurve_catalogue *out,
                           struct base_error *error)
{
    char path[200];
    write_text(place, "stars.csv", text);
    return lightcurve_catalogue_read(path_in(place, "stars.csv", path), out, error);
}

static void a_catalogue_is_read_and_searched_by_name(void **state)
{
    struct place *place = *state;
    struct lightcurve_catalogue catalogue;
    struct base_error error = {0};
    assert_true(read_catalogue(place,
                               "Star,note,RA [deg],Dec [deg],magnitude,temperature,radius,mass\n"
                               "RB-0002,x,10.5,-20.25,12.5,5800,1.1,0.9\n"
                               "RB-0001,,,,,,,\n",
                               &catalogue, &error));
    assert_int_equal(catalogue.count, 2);
    const struct lightcurve_star *star = lightcurve_catalogue_find(&catalogue, "RB-0002");
    assert_non_null(star);
    assert_true(star->ra_deg == 10.5 && star->dec_deg == -20.25 && star->magnitude == 12.5);
    assert_true(star->temperature_k == 5800 && star->radius_rsun == 1.1 && star->mass_msun == 0.9);
    star = lightcurve_catalogue_find(&catalogue, "RB-0001");
    assert_non_null(star);
    assert_true(star->ra_deg != star->ra_deg && star->mass_msun != star->mass_msun);
    assert_null(lightcurve_catalogue_find(&catalogue, "RB-0003"));
    assert_null(lightcurve_catalogue_find(&catalogue, "rb-0001"));
    lightcurve_catalogue_free(&catalogue);
    assert_null(lightcurve_catalogue_find(&catalogue, "RB-0002"));
    assert_true(read_catalogue(place, "name,mass\nRB-1,2\n", &catalogue, &error));
    assert_true(catalogue.stars[0].mass_msun == 2.0);
    lightcurve_catalogue_free(&catalogue);
}

static void a_bad_catalogue_is_refused_with_its_line(void **state)
{
    struct place *place = *state;
    static const struct {
        const char *text, *sentence;
    } cases[] = {{"target,ra\nRB-1,2\n", "no column named \"star\" or \"name\""},
                 {"star,ra\n", "holds no stars"},
                 {"star,ra\nRB-1,360\n", "Line 2: the ra \"360\" is outside of 0 to 360"},
                 {"star,dec\nRB-1,1\nRB-2,-90.5\n", "Line 3: the dec"},
                 {"star,mass\nRB-1,0\n", "Line 2: the mass"},
                 {"star,radius\nRB-1,big\n", "Line 2: the radius \"big\" is not a number"},
                 {"star,ra\nRB-1,1\nRB-2,1\nRB-1,1\n",
                  "Line 4: the star \"RB-1\" stands in the catalogue on line 2 already"},
                 {"star,ra\n,1\n", "Line 2: the star's name"},
                 {"star,ra\nRB\xff,1\n", "Line 2: the star's name"}};
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        struct lightcurve_catalogue catalogue;
        struct base_error error;
        assert_fails(read_catalogue(place, cases[i].text, &catalogue, &error), error, BASE_INVALID,
                     cases[i].sentence);
        assert_null(catalogue.stars);
    }
    char path[200];
    struct lightcurve_catalogue catalogue;
    struct base_error error;
    assert_fails(lightcurve_catalogue_read(path_in(place, "none", path), &catalogue, &error), error,
                 BASE_NOT_FOUND, "none");
}

#define IN_A_PLACE(test) cmocka_unit_test_setup_teardown(test, make_place, remove_place)

int main(void)
{
    const struct CMUnitTest tests[] = {
        IN_A_PLACE(a_folder_is_walked_in_the_order_of_its_names),
        IN_A_PLACE(links_pipes_and_devices_in_a_folder_are_passed_over),
        IN_A_PLACE(folders_too_deep_are_told_of),
        IN_A_PLACE(a_path_that_cannot_be_read_is_an_error),
        IN_A_PLACE(archives_are_walked_whatever_they_are_called),
        IN_A_PLACE(an_archive_in_a_folder_is_walked_too),
        IN_A_PLACE(unsafe_paths_in_an_archive_are_refused_and_the_rest_is_read),
        IN_A_PLACE(hard_links_and_pipes_in_an_archive_are_passed_over),
        IN_A_PLACE(an_archive_cut_short_anywhere_ends_with_a_reason),
        IN_A_PLACE(a_damaged_entry_does_not_stop_the_others),
        IN_A_PLACE(an_archive_in_an_archive_is_refused),
        IN_A_PLACE(a_bomb_is_refused_whether_its_entry_is_wanted_or_not),
        IN_A_PLACE(a_visitor_can_stop_the_walk),
        IN_A_PLACE(a_count_knows_the_bytes_that_a_walk_will_visit),
        IN_A_PLACE(names_that_are_no_text_are_shown_without_their_bytes),
        IN_A_PLACE(a_folder_is_read_from_end_to_end),
        IN_A_PLACE(a_catalogue_is_read_and_searched_by_name),
        IN_A_PLACE(a_bad_catalogue_is_refused_with_its_line),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
