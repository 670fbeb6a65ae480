/*
 * The invented Long Reach survey, for the demo: light curves that a program made up, with the truth
 * about them beside. Nothing in it was observed.
 */
#ifndef EBBMARK_INVENT_H
#define EBBMARK_INVENT_H

#include <stdint.h>

#include "ebbmark/error.h"

#define INVENT_STARS 80
#define INVENT_SEED_DEFAULT 20460u

/* Write the survey under `folder`, made if it is not there: light-curves/ (FITS and CSV),
 * stars.csv (the catalogue), truth.csv (every dip that the data cover), lures.csv (what draws marks
 * but is no dip) and README.md. The bytes depend on the seed alone: the same seed gives the same
 * files. Files of those names are replaced, each one whole. BASE_DISK_FULL, BASE_IO, BASE_DENIED
 * when a file cannot be written, BASE_MEMORY. */
bool campaign_invent(const char *folder, uint64_t seed, struct base_error *error);

#endif
