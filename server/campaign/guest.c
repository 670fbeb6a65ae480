#include "guest.h"

#include <sodium.h>
#include <stdio.h>

/* What one meets on a shore at low water: words that hurt nobody. */
static const char *const manners[] = {"brisk", "bright", "calm",  "clear",  "early", "gentle",
                                      "grey",  "keen",   "late",  "light",  "mild",  "patient",
                                      "quick", "quiet",  "ready", "salt",   "sandy", "silver",
                                      "slow",  "small",  "soft",  "steady", "still", "windy"};
static const char *const beings[] = {
    "avocet", "barnacle", "cockle", "curlew", "dunlin", "eider",     "gannet", "godwit",
    "heron",  "kelp",     "knot",   "limpet", "mussel", "otter",     "plover", "puffin",
    "sedge",  "shrimp",   "skate",  "sole",   "tern",   "turnstone", "whelk",  "wrack"};

#define COUNT(array) (sizeof(array) / sizeof((array)[0]))

void guest_handle(char out[GUEST_HANDLE_SIZE])
{
    (void)snprintf(
        out, GUEST_HANDLE_SIZE, "%s %s %u", manners[randombytes_uniform((unsigned)COUNT(manners))],
        beings[randombytes_uniform((unsigned)COUNT(beings))], 1000 + randombytes_uniform(9000));
}
