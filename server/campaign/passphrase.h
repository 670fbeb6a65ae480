/*
 * Passphrases: argon2id through libsodium, a few at a time so that memory stays bounded.
 * Thread-safe.
 */
#ifndef CAMPAIGN_PASSPHRASE_H
#define CAMPAIGN_PASSPHRASE_H

#include <pthread.h>
#include <sodium.h>

#include "ebbmark/error.h"

struct passphrase_gate {
    pthread_mutex_t lock; /* guards the rest */
    pthread_cond_t freed;
    unsigned hashing, waiting;
    char nobody[crypto_pwhash_STRBYTES]; /* a hash of nothing known; "" until first needed */
};

void passphrase_gate_open(struct passphrase_gate *gate);
void passphrase_gate_close(struct passphrase_gate *gate);

/* BASE_INVALID unless its length is within the limits of campaign.h. */
bool passphrase_check(const char *passphrase, struct base_error *error);

/* Slow. BASE_BUSY when too many wait already, BASE_MEMORY. */
bool passphrase_hash(struct passphrase_gate *gate, const char *passphrase,
                     char out[crypto_pwhash_STRBYTES], struct base_error *error);

/* Slow. Does the passphrase belong to the hash? With hash "" or NULL the answer is no, after the
 * same work. False only on BASE_BUSY and BASE_MEMORY. */
bool passphrase_verify(struct passphrase_gate *gate, const char *hash, const char *passphrase,
                       bool *right, struct base_error *error);

#endif
