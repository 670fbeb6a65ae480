/* What the walks over folders and archives share. Private to the room. */
#ifndef EBBMARK_SERVER_LIGHTCURVE_WALK_H
#define EBBMARK_SERVER_LIGHTCURVE_WALK_H

#include "ebbmark/text.h"
#include "read.h"

/* A walk under way. With visit NULL it only counts. */
struct lightcurve_walker {
    lightcurve_visit *visit;
    void *context;
    size_t files;
    uint64_t bytes;
    bool stopped; /* the visitor wants no more */
};

/* Tell the visitor of a file that was read, or (data NULL) of one that was not. False when the
 * walk is to stop. */
bool lightcurve_walker_tell(struct lightcurve_walker *walker, const char *label, const void *data,
                            size_t size, const struct base_error *reason);
/* Count a file that was not looked into. */
void lightcurve_walker_count(struct lightcurve_walker *walker, uint64_t bytes);

/* True for names that are passed over: those starting with a dot, and README*. */
bool lightcurve_walk_passes_over(const char *name);

/* Append a name from outside to a label: what is no UTF-8 or a control character becomes '?'. */
void lightcurve_label_add(struct base_text *label, const char *name);

/* Visit the entries of the archive open at `fd`, `size` bytes long. False when the walk is to
 * stop. */
bool lightcurve_walk_archive(struct lightcurve_walker *walker, int fd, uint64_t size,
                             const char *label);

#endif
