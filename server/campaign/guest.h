/* Invented handles for guests. */
#ifndef CAMPAIGN_GUEST_H
#define CAMPAIGN_GUEST_H

#define GUEST_HANDLE_SIZE 33

/* Such as "calm dunlin 4821": at random, over five million of them. */
void guest_handle(char out[GUEST_HANDLE_SIZE]);

#endif
