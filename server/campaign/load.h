/*
 * Inside loading: one file from its bytes to what the store takes. Files of a group are worked on
 * side by side; a file and its curves belong to one thread at a time.
 */
#ifndef CAMPAIGN_LOAD_H
#define CAMPAIGN_LOAD_H

#include "ebbmark/lightcurve_measure.h"
#include "inside.h"

/* What every file of a load shares; nothing in it changes while files are worked on. */
struct load_recipe {
    struct store *store;
    int64_t batch;
    const struct lightcurve_mapping *mapping;
    const struct lightcurve_catalogue *catalogue;
    uint32_t quality_mask;
    double trend_window_d;
    struct lightcurve_cut_settings cut;
};

/* One light curve made ready to be stored. */
struct load_curve {
    bool ok;
    struct base_error error;     /* why not */
    struct lightcurve curve;     /* flux and error are freed once the arrays below stand */
    float *flux, *trend, *sigma; /* as the store takes them; sigma may be NULL */
    struct lightcurve_noise noise;
    struct store_span *spans;
    size_t span_count;
};

struct load_file {
    char *label; /* owned */
    const void *data;
    void *copy; /* data, where the file owns it; NULL where it is lent */
    size_t size;
    unsigned char sha256[STORE_HASH_SIZE];
    enum store_file_outcome outcome;      /* UNKNOWN while it may still be loaded */
    char reason[BASE_SENTENCE_SIZE + 80]; /* why refused, or what was left out */
    const struct load_file *twin;         /* an earlier one of the same bytes, in the same group */
    bool failed;                          /* not the file's fault: `error` ends the load */
    struct base_error error;
    struct lightcurve_reading reading;
    struct load_curve *curves; /* reading.count of them */
    size_t stars_left_out;
    struct store_light_curve_new *ready; /* ready_count of them, pointing into curves */
    size_t ready_count;
};

/* Begin a file. Its bytes are copied when `lent` is false. False when out of memory. `data` NULL:
 * it could not be read, for the reason given. */
bool load_file_open(struct load_file *file, const char *label, const void *data, size_t size,
                    bool lent, const struct base_error *reason);
void load_file_free(struct load_file *file);

/* Step one: its SHA-256, whether it is known, and reading it. Lets go of the bytes. */
void load_file_read(struct load_file *file, const struct load_recipe *recipe);

/* Step two, for each curve: clean, cut, trend, noise. Lets go of what was read. */
void load_file_prepare(struct load_file *file, size_t curve, const struct load_recipe *recipe);

/* Step three: what the store takes, in *out; points into the file. False when out of memory. */
bool load_file_finish(struct load_file *file, const struct load_recipe *recipe,
                      struct store_file_new *out, struct base_error *error);

#endif
