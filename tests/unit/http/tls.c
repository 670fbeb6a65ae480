#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include "client.h"

/* A certificate is made for the test by openssl, and curl is the client; without them it is skipped
 * and says so. */

static char folder[] = "/tmp/http-tls-XXXXXX", cert[64], key[64];

static bool run(const char *format, ...) __attribute__((format(printf, 1, 2)));
static bool run(const char *format, ...)
{
    char command[1024];
    va_list list;
    va_start(list, format);
    (void)vsnprintf(command, sizeof command, format, list);
    va_end(list);
    return system(command) == 0;
}

static enum http_result who(struct http_exchange *exchange, void *context)
{
    size_t size;
    (void)context;
    (void)http_body(exchange, &size);
    http_answer_cookie(exchange, "fresh", 10);
    return http_answer_json(
        exchange, 200,
        json_pack("{s:b, s:I}", "secure", http_is_secure(exchange), "size", (json_int_t)size));
}

static const struct http_route table[] = {{"GET", "/who", HTTP_ANYONE, 0, 0, who},
                                          {"POST", "/who", HTTP_ANYONE, HTTP_SLOW, 200000, who},
                                          {0}};
static const struct http_route *const tables[] = {table, NULL};

static int begin(void **state)
{
    (void)state;
    if (mkdtemp(folder) == NULL)
        return -1;
    (void)snprintf(cert, sizeof cert, "%s/cert.pem", folder);
    (void)snprintf(key, sizeof key, "%s/key.pem", folder);
    return 0;
}

static int end(void **state)
{
    (void)state;
    return run("rm -r %s", folder) ? 0 : -1;
}

static void it_serves_under_tls(void **state)
{
    (void)state;
    if (!run("command -v openssl >/dev/null && command -v curl >/dev/null")) {
        print_message("openssl or curl is not here\n");
        skip();
    }
    assert_true(run("openssl req -x509 -newkey ec -pkeyopt ec_paramgen_curve:prime256v1 -nodes "
                    "-keyout %s -out %s -days 2 -subj /CN=localhost "
                    "-addext subjectAltName=IP:127.0.0.1 2>/dev/null",
                    key, cert));
    const struct http_options options = {.listen = "127.0.0.1:0",
                                         .routes = tables,
                                         .cookie_name = "s",
                                         .tls_cert = cert,
                                         .tls_key = key};
    struct http_server *server = server_begin(&options);
    assert_true(run("head -c 150000 /dev/zero >%s/body", folder));
    assert_true(run("curl -sS --max-time 20 --cacert %s -D %s/head -o %s/got "
                    "https://127.0.0.1:%u/who",
                    cert, folder, folder, http_port(server)));
    assert_true(run("grep -qx '{\"secure\":true,\"size\":0}' %s/got", folder));
    assert_true(run("grep -qi '^set-cookie: .*; Secure' %s/head", folder));
    assert_true(run("curl -sS --max-time 20 --cacert %s --data-binary @%s/body -o %s/got "
                    "https://127.0.0.1:%u/who",
                    cert, folder, folder, http_port(server)));
    assert_true(run("grep -qx '{\"secure\":true,\"size\":150000}' %s/got", folder));
    assert_false(run("curl -sS --max-time 20 --tlsv1.0 --tls-max 1.1 --ciphers DEFAULT@SECLEVEL=0 "
                     "--cacert %s -o %s/got "
                     "https://127.0.0.1:%u/who 2>/dev/null",
                     cert, folder, http_port(server)));
    /* Plain text to a TLS port gets no answer, and does no harm. */
    struct reply reply = ask_once(http_port(server), "GET", "/who", "");
    assert_int_equal(reply.status, 0);
    reply_free(&reply);
    http_stop(server, 1.0);
}

static void a_certificate_that_cannot_be_used_stops_the_start(void **state)
{
    (void)state;
    char empty[80], nothing[80];
    (void)snprintf(empty, sizeof empty, "%s/empty.pem", folder);
    (void)snprintf(nothing, sizeof nothing, "%s/nothing.pem", folder);
    assert_true(run(": >%s", empty));
    const struct {
        const char *cert;
        enum base_error_kind kind;
    } cases[] = {{empty, BASE_INVALID}, {nothing, BASE_NOT_FOUND}, {folder, BASE_IO}};
    for (size_t i = 0; i < 3; i++) {
        const struct http_options options = {.listen = "127.0.0.1:0",
                                             .routes = tables,
                                             .tls_cert = cases[i].cert,
                                             .tls_key = cases[i].cert};
        struct http_server *server;
        struct base_error error = {0};
        assert_false(http_start(&options, &server, &error));
        assert_int_equal(error.kind, cases[i].kind);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(it_serves_under_tls),
        cmocka_unit_test(a_certificate_that_cannot_be_used_stops_the_start),
    };
    return cmocka_run_group_tests(tests, begin, end);
}
