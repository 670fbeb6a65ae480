#include "cli.h"

#include <inttypes.h>
#include <stdio.h>
#include <string.h>
#include <termios.h>
#include <unistd.h>

#include "ebbmark/clock.h"

static const char *const role_names[] = {
    [STORE_REVIEWER] = "reviewer", [STORE_SCIENCE] = "science", [STORE_ADMIN] = "admin"};

static bool role_read(const char *text, enum store_role *out)
{
    for (int role = STORE_REVIEWER; role <= STORE_ADMIN; role++)
        if (strcmp(text, role_names[role]) == 0) {
            *out = (enum store_role)role;
            return true;
        }
    (void)fprintf(stderr, "ebbmark: --role is reviewer, science or admin, not '%s'.\n", text);
    return false;
}

/* One line from standard input, not shown while it is typed. False when there is none. */
static bool passphrase_read(char *out, size_t size)
{
    struct termios before;
    bool on_terminal = isatty(STDIN_FILENO) == 1 && tcgetattr(STDIN_FILENO, &before) == 0;
    if (on_terminal) {
        (void)fputs("Passphrase: ", stderr);
        struct termios silent = before;
        silent.c_lflag &= ~(tcflag_t)ECHO;
        (void)tcsetattr(STDIN_FILENO, TCSAFLUSH, &silent);
    }
    bool got = fgets(out, (int)size, stdin) != NULL;
    if (on_terminal) {
        (void)tcsetattr(STDIN_FILENO, TCSAFLUSH, &before);
        (void)fputc('\n', stderr);
    }
    if (got)
        out[strcspn(out, "\r\n")] = '\0';
    return got;
}

static bool add(struct campaign *campaign, const char *handle, enum store_role role,
                struct base_error *error)
{
    char passphrase[CAMPAIGN_PASSPHRASE_BYTES_MAX + 2];
    if (!passphrase_read(passphrase, sizeof passphrase))
        return base_fail(error, BASE_INVALID,
                         "Give the passphrase on standard input, on a line of its own.");
    int64_t id = 0;
    bool ok = campaign_person_add(campaign, handle, passphrase, role, &id, error);
    explicit_bzero(passphrase, sizeof passphrase);
    if (ok)
        (void)printf("Person %" PRId64 ": %s, %s.\n", id, handle, role_names[role]);
    return ok;
}

static bool list(struct store *store, struct base_error *error)
{
    bool ok = true;
    int64_t after = 0;
    for (size_t count = 1; ok && count > 0;) {
        struct base_arena *arena = base_arena_new(0);
        struct store_person *people = NULL;
        ok = arena != NULL ? store_people_list(store, arena, after, 500, &people, &count, error)
                           : base_fail(error, BASE_MEMORY, "There is no memory for the list.");
        for (size_t i = 0; ok && people != NULL && i < count; i++) {
            char joined[BASE_CLOCK_SIZE];
            (void)printf("%6" PRId64 "  %-9s  %s  %s%s%s\n", people[i].id,
                         role_names[people[i].role],
                         base_clock_rfc3339(joined, people[i].joined_ms),
                         people[i].left ? "(left)" : people[i].handle,
                         people[i].suspended ? "  suspended" : "",
                         people[i].passphrase[0] == '\0' && !people[i].left ? "  guest" : "");
            after = people[i].id;
        }
        base_arena_free(arena);
    }
    return ok;
}

static bool token(struct campaign *campaign, const char *handle, double days,
                  struct base_error *error)
{
    char key[256], secret[CAMPAIGN_SECRET_SIZE];
    struct store_person person = {0};
    struct base_arena *arena = base_arena_new(0);
    bool ok = arena != NULL
                  ? campaign_handle_key(handle, key, error) &&
                        store_person_by_key(campaign_store(campaign), arena, key, &person, error) &&
                        campaign_access_give(campaign, STORE_TOKEN, person.id, person.role, days,
                                             secret, error)
                  : base_fail(error, BASE_MEMORY, "There is no memory to make a token.");
    base_arena_free(arena);
    if (ok)
        (void)printf("%s\n", secret);
    if (ok && isatty(STDERR_FILENO) == 1)
        (void)fprintf(stderr, "Keep it safe: it is shown this once. It ends in %g days.\n", days);
    return ok;
}

int cli_person(int argc, char **argv)
{
    const char *database = NULL, *new_handle = NULL, *role_text = "reviewer";
    const char *token_handle = NULL, *days_text = NULL;
    bool list_all = false, help;
    int rest;
    double days = 90.0;
    enum store_role role = STORE_REVIEWER;
    const struct cli_option options[] = {{"database", &database, NULL, true},
                                         {"add", &new_handle, NULL, false},
                                         {"role", &role_text, NULL, false},
                                         {"list", NULL, &list_all, false},
                                         {"token", &token_handle, NULL, false},
                                         {"days", &days_text, NULL, false},
                                         {NULL, NULL, NULL, false}};
    if (!cli_options_read(argc, argv, options, &rest, &help))
        return cli_usage("person", help);
    if ((new_handle != NULL) + (token_handle != NULL) + list_all != 1) {
        (void)fprintf(stderr, "ebbmark: give one of --add, --list and --token.\n");
        return cli_usage("person", false);
    }
    if (!role_read(role_text, &role) || !cli_real_read("days", days_text, 0.01, 3660.0, &days))
        return CLI_USAGE;
    struct base_error error = {0};
    struct cli_campaign opened;
    if (!cli_campaign_open(&opened, database, false, &error))
        return cli_fail(&error);
    bool ok = new_handle != NULL     ? add(opened.campaign, new_handle, role, &error)
              : token_handle != NULL ? token(opened.campaign, token_handle, days, &error)
                                     : list(opened.store, &error);
    cli_campaign_close(&opened);
    return ok ? CLI_DONE : cli_fail(&error);
}
