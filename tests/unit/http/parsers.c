#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include <stdio.h>
#include <string.h>

#include "../../../server/http/accept.h"
#include "../../../server/http/cookie.h"
#include "../../../server/http/proxy.h"
#include "../../../server/http/uri.h"

/* ---- addresses ------------------------------------------------------------------------------ */

static void an_address_is_cut_into_decoded_parts_and_fields(void **state)
{
    (void)state;
    char text[] = "/api/v1/stars/RB%2D0001%20%C3%A9?limit=5&sort=-time+s%26x&empty=&bare";
    struct http_target target;
    assert_null(http_target_cut(text, &target));
    assert_int_equal(target.part_count, 4);
    assert_string_equal(target.parts[0], "api");
    assert_string_equal(target.parts[3], "RB-0001 \xc3\xa9");
    assert_int_equal(target.field_count, 4);
    assert_string_equal(target.fields[0].name, "limit");
    assert_string_equal(target.fields[0].value, "5");
    assert_string_equal(target.fields[1].value, "-time s&x");
    assert_string_equal(target.fields[2].value, "");
    assert_string_equal(target.fields[3].name, "bare");
    assert_string_equal(target.fields[3].value, "");
}

static void a_slash_that_was_escaped_parts_nothing(void **state)
{
    (void)state;
    char text[] = "/stars/a%2Fb";
    struct http_target target;
    assert_null(http_target_cut(text, &target));
    assert_int_equal(target.part_count, 2);
    assert_string_equal(target.parts[1], "a/b");
}

static void a_plus_is_a_space_in_the_query_alone(void **state)
{
    (void)state;
    char text[] = "/a+b?c=d+e";
    struct http_target target;
    assert_null(http_target_cut(text, &target));
    assert_string_equal(target.parts[0], "a+b");
    assert_string_equal(target.fields[0].value, "d e");
}

/* RFC 9112, 3.2.2: a server must take the absolute form too. */
static void an_absolute_address_is_taken(void **state)
{
    (void)state;
    char text[] = "HTTP://example.org:80/healthz?a=b", root[] = "/";
    struct http_target target;
    assert_null(http_target_cut(text, &target));
    assert_int_equal(target.part_count, 1);
    assert_string_equal(target.parts[0], "healthz");
    assert_int_equal(target.field_count, 1);
    assert_null(http_target_cut(root, &target));
    assert_int_equal(target.part_count, 0);
}

static void an_unsound_address_is_refused_with_a_reason(void **state)
{
    (void)state;
    const char *const unsound[] = {
        "",          "x",          "*",           "/%",      "/%4",
        "/%zz",      "/a%00b",     "/%ff",        "/%c3",    "/%ed%a0%80",
        "/a%0Ab",    "/a%7f",      "/?a=%",       "/?%g0=1", "/?a=%00",
        "/?a=1&a=2", "/?a=%c3%28", "http://host", "?a=b",    "/1/2/3/4/5/6/7/8/9/10/11/12/13"};
    for (size_t i = 0; i < sizeof unsound / sizeof unsound[0]; i++) {
        char text[64];
        struct http_target target;
        (void)strcpy(text, unsound[i]);
        const char *wrong = http_target_cut(text, &target);
        if (wrong == NULL)
            fail_msg("%s was taken", unsound[i]);
        assert_true(wrong[strlen(wrong) - 1] == '.');
    }
}

static void a_query_holds_only_so_many_fields(void **state)
{
    (void)state;
    char text[512] = "/?";
    for (int i = 0; i <= HTTP_FIELDS_MAX; i++) {
        char field[16];
        (void)snprintf(field, sizeof field, "f%d=1&", i);
        (void)strcat(text, field);
    }
    struct http_target target;
    assert_non_null(http_target_cut(text, &target));
}

/* ---- secrets -------------------------------------------------------------------------------- */

static void assert_cookie(const char *header, const char *expected)
{
    const char *value;
    size_t length;
    bool found = http_cookie_find(header, "session", &value, &length);
    if (found != (expected != NULL))
        fail_msg("in \"%s\"", header);
    if (found) {
        assert_int_equal(length, strlen(expected));
        assert_memory_equal(value, expected, length);
    }
}

static void a_cookie_is_found_by_its_whole_name(void **state)
{
    (void)state;
    assert_cookie("session=abc", "abc");
    assert_cookie("a=b; session=abc; c=d", "abc");
    assert_cookie("  session=abc  ;x", "abc");
    assert_cookie("a=b;session=ab=c", "ab=c");
    assert_cookie("xsession=no; session=yes", "yes");
    assert_cookie("sessionx=no; session=yes", "yes");
    assert_cookie("session=first; session=second", "first");
    assert_cookie("", NULL);
    assert_cookie("session", NULL);
    assert_cookie("session=", NULL);
    assert_cookie("a=session=b", NULL);
    assert_cookie("session=\"abc\"", NULL);
    assert_cookie("session=a,b", NULL);
    assert_cookie("session=a b", NULL);
    assert_cookie("session=a\x80", NULL);
}

static void a_secret_that_is_too_long_is_nobodys(void **state)
{
    (void)state;
    char header[HTTP_SECRET_MAX + 32] = "session=";
    const char *value;
    size_t length;
    memset(header + 8, 'a', HTTP_SECRET_MAX);
    assert_true(http_cookie_find(header, "session", &value, &length));
    header[8 + HTTP_SECRET_MAX] = 'a';
    assert_false(http_cookie_find(header, "session", &value, &length));
}

static void a_bearer_token_is_taken_whole(void **state)
{
    (void)state;
    const char *token;
    size_t length;
    assert_true(http_bearer_find("bearer  abc-._~+/=", &token, &length));
    assert_string_equal(token, "abc-._~+/=");
    assert_int_equal(length, 10);
    assert_false(http_bearer_find("Bearer", &token, &length));
    assert_false(http_bearer_find("Bearer ", &token, &length));
    assert_false(http_bearer_find("Bearer a b", &token, &length));
    assert_false(http_bearer_find("Bearerabc", &token, &length));
    assert_false(http_bearer_find("Basic YTpi", &token, &length));
}

/* ---- negotiation ---------------------------------------------------------------------------- */

static const char *const offered[] = {"application/vnd.ebbmark.flux", "application/json",
                                      "text/csv"};

static int pick(const char *header)
{
    return http_accept_pick(header, offered, 3);
}

/* The rules of RFC 9110, 12.5.1. */
static void the_preferred_media_type_is_picked(void **state)
{
    (void)state;
    assert_int_equal(pick(NULL), 0);
    assert_int_equal(pick(" "), 0);
    assert_int_equal(pick("*/*"), 0);
    assert_int_equal(pick("application/json"), 1);
    assert_int_equal(pick("APPLICATION/JSON"), 1);
    assert_int_equal(pick("text/*"), 2);
    assert_int_equal(pick("text/html, application/xhtml+xml, */*;q=0.8"), 0);
    assert_int_equal(pick("application/json;q=0.5, text/csv"), 2);
    assert_int_equal(pick("application/json; q=0.501, text/csv;q=0.5"), 1);
    assert_int_equal(pick("*/*;q=0.1, application/vnd.ebbmark.flux;q=0"), 1);
    assert_int_equal(pick("application/*, application/vnd.ebbmark.flux;q=0.2"), 1);
    assert_int_equal(pick("text/csv;header=present;q=1"), 2);
    assert_int_equal(pick("text/csv;title=\"a, b;q=0\""), 2);
}

static void a_header_that_allows_none_picks_none(void **state)
{
    (void)state;
    assert_int_equal(pick("text/html"), -1);
    assert_int_equal(pick("*/*;q=0"), -1);
    assert_int_equal(pick("application/json;q=0"), -1);
    assert_int_equal(pick("application/json;q=2"), -1);
    assert_int_equal(pick("application/json;q=x"), -1);
    assert_int_equal(pick("application/json;q="), -1);
    assert_int_equal(pick(",,;;q,=/"), -1);
    assert_int_equal(pick("text/csv;title=\"unended, */*"), 2);
}

static void gzip_is_used_only_when_it_is_accepted(void **state)
{
    (void)state;
    assert_true(http_accept_gzip("gzip"));
    assert_true(http_accept_gzip("br, GZIP;q=0.1"));
    assert_true(http_accept_gzip("*"));
    assert_false(http_accept_gzip(NULL));
    assert_false(http_accept_gzip(""));
    assert_false(http_accept_gzip("br"));
    assert_false(http_accept_gzip("gzip;q=0"));
    assert_false(http_accept_gzip("*, gzip;q=0.000"));
    assert_false(http_accept_gzip("gzipped"));
}

static void an_etag_is_found_in_a_list(void **state)
{
    (void)state;
    assert_true(http_etag_is_listed("\"a\"", "\"a\""));
    assert_true(http_etag_is_listed("\"b\", W/\"a\"", "\"a\""));
    assert_true(http_etag_is_listed("\"x,y\", \"a\"", "\"a\""));
    assert_true(http_etag_is_listed(" * ", "\"a\""));
    assert_false(http_etag_is_listed("\"b\"", "\"a\""));
    assert_false(http_etag_is_listed("a", "\"a\""));
    assert_false(http_etag_is_listed("", "\"a\""));
}

/* ---- addresses of clients ---------------------------------------------------------------------
 */

static struct http_ip ip(const char *text)
{
    struct http_ip out;
    if (!http_ip_read(text, strlen(text), &out))
        fail_msg("%s is not an address", text);
    return out;
}

static bool holds(const char *network, const char *address)
{
    const char *const list[] = {network, NULL};
    struct http_networks networks;
    struct base_error error = {0};
    if (!http_networks_read(list, &networks, &error))
        fail_msg("%s", error.sentence);
    struct http_ip wanted = ip(address);
    bool held = http_networks_hold(&networks, &wanted);
    http_networks_free(&networks);
    return held;
}

static void a_network_holds_the_addresses_that_share_its_bits(void **state)
{
    (void)state;
    assert_true(holds("10.0.0.0/8", "10.255.1.2"));
    assert_false(holds("10.0.0.0/8", "11.0.0.0"));
    assert_true(holds("192.0.2.128/25", "192.0.2.128"));
    assert_false(holds("192.0.2.128/25", "192.0.2.127"));
    assert_true(holds("192.0.2.7", "192.0.2.7"));
    assert_false(holds("192.0.2.7", "192.0.2.6"));
    assert_true(holds("192.0.2.4/31", "192.0.2.5"));
    assert_false(holds("192.0.2.4/31", "192.0.2.6"));
    assert_true(holds("0.0.0.0/0", "203.0.113.9"));
    assert_false(holds("0.0.0.0/0", "2001:db8::1"));
    assert_true(holds("2001:db8::/33", "2001:db8:7fff::1"));
    assert_false(holds("2001:db8::/33", "2001:db8:8000::1"));
    assert_true(holds("::/0", "192.0.2.1"));
    assert_true(holds("::1", "::1"));
}

static void what_is_not_a_network_is_refused(void **state)
{
    (void)state;
    const char *const wrong[] = {
        "",       "10.0.0.0/33", "10.0.0/8",    "10.0.0.0/", "10.0.0.0/-1",
        "::/129", "localhost",   "10.0.0.0/8x", "/8",        "10.0.0.0/ 8"};
    for (size_t i = 0; i < sizeof wrong / sizeof wrong[0]; i++) {
        const char *const list[] = {wrong[i], NULL};
        struct http_networks networks;
        struct base_error error = {0};
        assert_false(http_networks_read(list, &networks, &error));
        assert_int_equal(error.kind, BASE_INVALID);
        assert_int_equal(networks.count, 0);
    }
}

static void an_address_is_read_as_proxies_write_it(void **state)
{
    (void)state;
    const struct {
        const char *sent, *read;
    } good[] = {{"192.0.2.7", "192.0.2.7"},           {"192.0.2.7:80", "192.0.2.7"},
                {"2001:DB8::1", "2001:db8::1"},       {"[2001:db8::1]", "2001:db8::1"},
                {"[2001:db8::1]:443", "2001:db8::1"}, {"::ffff:192.0.2.7", "192.0.2.7"}};
    for (size_t i = 0; i < sizeof good / sizeof good[0]; i++) {
        char text[HTTP_IP_SIZE];
        struct http_ip out = ip(good[i].sent);
        assert_string_equal(http_ip_write(&out, text), good[i].read);
    }
    const char *const bad[] = {"",       "unknown",     "_hidden",   "192.0.2", "[::1",
                               "[::1]x", "192.0.2.256", "1.2.3.4.5", "::1::"};
    for (size_t i = 0; i < sizeof bad / sizeof bad[0]; i++) {
        struct http_ip out;
        assert_false(http_ip_read(bad[i], strlen(bad[i]), &out));
    }
}

static void assert_client(const char *peer, const char *forwarded_for, const char *expected)
{
    const char *const list[] = {"10.0.0.0/8", "::1", NULL};
    struct http_networks trusted;
    assert_true(http_networks_read(list, &trusted, NULL));
    struct http_ip from = ip(peer), client = http_client_ip(&trusted, &from, forwarded_for);
    char text[HTTP_IP_SIZE];
    assert_string_equal(http_ip_write(&client, text), expected);
    http_networks_free(&trusted);
}

static void only_a_trusted_proxy_speaks_for_a_client(void **state)
{
    (void)state;
    assert_client("10.0.0.1", "203.0.113.9", "203.0.113.9");
    assert_client("203.0.113.1", "198.51.100.7", "203.0.113.1");
    assert_client("10.0.0.1", NULL, "10.0.0.1");
    assert_client("10.0.0.1", "", "10.0.0.1");
    /* What the client itself wrote stands to the left of what the proxy saw. */
    assert_client("10.0.0.1", "1.1.1.1, 203.0.113.9", "203.0.113.9");
    assert_client("10.0.0.1", "1.1.1.1, 203.0.113.9 , 10.9.9.9", "203.0.113.9");
    assert_client("10.0.0.1", "10.0.0.2, 10.0.0.3", "10.0.0.2");
    assert_client("10.0.0.1", "203.0.113.9, nonsense", "10.0.0.1");
    assert_client("10.0.0.1", "203.0.113.9, nonsense, 10.0.0.3", "10.0.0.3");
    assert_client("::1", "[2001:db8::9]:5000", "2001:db8::9");
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(an_address_is_cut_into_decoded_parts_and_fields),
        cmocka_unit_test(a_slash_that_was_escaped_parts_nothing),
        cmocka_unit_test(a_plus_is_a_space_in_the_query_alone),
        cmocka_unit_test(an_absolute_address_is_taken),
        cmocka_unit_test(an_unsound_address_is_refused_with_a_reason),
        cmocka_unit_test(a_query_holds_only_so_many_fields),
        cmocka_unit_test(a_cookie_is_found_by_its_whole_name),
        cmocka_unit_test(a_secret_that_is_too_long_is_nobodys),
        cmocka_unit_test(a_bearer_token_is_taken_whole),
        cmocka_unit_test(the_preferred_media_type_is_picked),
        cmocka_unit_test(a_header_that_allows_none_picks_none),
        cmocka_unit_test(gzip_is_used_only_when_it_is_accepted),
        cmocka_unit_test(an_etag_is_found_in_a_list),
        cmocka_unit_test(a_network_holds_the_addresses_that_share_its_bits),
        cmocka_unit_test(what_is_not_a_network_is_refused),
        cmocka_unit_test(an_address_is_read_as_proxies_write_it),
        cmocka_unit_test(only_a_trusted_proxy_speaks_for_a_client),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
