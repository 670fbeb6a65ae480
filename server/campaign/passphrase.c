#include "passphrase.h"

#include <string.h>

#include "ebbmark/campaign.h"

void passphrase_gate_open(struct passphrase_gate *gate)
{
    *gate = (struct passphrase_gate){0};
    (void)pthread_mutex_init(&gate->lock, NULL);
    (void)pthread_cond_init(&gate->freed, NULL);
}

void passphrase_gate_close(struct passphrase_gate *gate)
{
    (void)pthread_cond_destroy(&gate->freed);
    (void)pthread_mutex_destroy(&gate->lock);
}

bool passphrase_check(const char *passphrase, struct base_error *error)
{
    size_t length = strlen(passphrase);
    if (length < CAMPAIGN_PASSPHRASE_BYTES_MIN || length > CAMPAIGN_PASSPHRASE_BYTES_MAX)
        return base_fail_field(error, BASE_INVALID, "passphrase",
                               "A passphrase has %d to %d bytes; a few words do well.",
                               CAMPAIGN_PASSPHRASE_BYTES_MIN, CAMPAIGN_PASSPHRASE_BYTES_MAX);
    return true;
}

/* Wait for a turn to hash. */
static bool enter(struct passphrase_gate *gate, struct base_error *error)
{
    (void)pthread_mutex_lock(&gate->lock);
    bool room = gate->waiting < CAMPAIGN_HASHES_WAITING_MAX;
    if (room) {
        gate->waiting++;
        while (gate->hashing >= CAMPAIGN_HASHES_AT_ONCE)
            (void)pthread_cond_wait(&gate->freed, &gate->lock);
        gate->waiting--;
        gate->hashing++;
    }
    (void)pthread_mutex_unlock(&gate->lock);
    return room || base_fail(error, BASE_BUSY,
                             "Too many people are signing in at this moment (limit %d waiting).",
                             CAMPAIGN_HASHES_WAITING_MAX);
}

static void leave(struct passphrase_gate *gate)
{
    (void)pthread_mutex_lock(&gate->lock);
    gate->hashing--;
    (void)pthread_cond_signal(&gate->freed);
    (void)pthread_mutex_unlock(&gate->lock);
}

static bool hash(const char *passphrase, char out[crypto_pwhash_STRBYTES], struct base_error *error)
{
    return crypto_pwhash_str(out, passphrase, strlen(passphrase),
                             crypto_pwhash_OPSLIMIT_INTERACTIVE,
                             crypto_pwhash_MEMLIMIT_INTERACTIVE) == 0 ||
           base_fail(error, BASE_MEMORY, "There is no memory to hash a passphrase.");
}

bool passphrase_hash(struct passphrase_gate *gate, const char *passphrase,
                     char out[crypto_pwhash_STRBYTES], struct base_error *error)
{
    if (!enter(gate, error))
        return false;
    bool ok = hash(passphrase, out, error);
    leave(gate);
    return ok;
}

/* The hash that stands in for people who are not there, made on the first sign-in of all, whoever
 * that is, so that it costs no sign-in more than another. */
static bool nobody_ready(struct passphrase_gate *gate, char out[crypto_pwhash_STRBYTES],
                         struct base_error *error)
{
    (void)pthread_mutex_lock(&gate->lock);
    bool ready = gate->nobody[0] != '\0';
    memcpy(out, gate->nobody, crypto_pwhash_STRBYTES);
    (void)pthread_mutex_unlock(&gate->lock);
    if (ready)
        return true;
    unsigned char random[16];
    char text[2 * sizeof random + 1];
    randombytes_buf(random, sizeof random);
    (void)sodium_bin2hex(text, sizeof text, random, sizeof random);
    if (!passphrase_hash(gate, text, out, error))
        return false;
    (void)pthread_mutex_lock(&gate->lock);
    memcpy(gate->nobody, out, crypto_pwhash_STRBYTES);
    (void)pthread_mutex_unlock(&gate->lock);
    return true;
}

bool passphrase_verify(struct passphrase_gate *gate, const char *known, const char *passphrase,
                       bool *right, struct base_error *error)
{
    char nobody[crypto_pwhash_STRBYTES];
    *right = false;
    if (!nobody_ready(gate, nobody, error) || !enter(gate, error))
        return false;
    bool somebody = known != NULL && known[0] != '\0';
    size_t length = strlen(passphrase);
    size_t used = length <= CAMPAIGN_PASSPHRASE_BYTES_MAX ? length : CAMPAIGN_PASSPHRASE_BYTES_MAX;
    bool match = crypto_pwhash_str_verify(somebody ? known : nobody, passphrase, used) == 0;
    leave(gate);
    *right = match && somebody && used == length;
    return true;
}
