/* A request as it is judged, and the receipt that tells the verdict. */
#ifndef PB_REQUEST_H
#define PB_REQUEST_H

#include <stdbool.h>
#include <stdint.h>

#include "body.h"
#include "frame.h"
#include "kinds.h"

struct pb_request {
    struct pb_header header;
    const uint8_t *body_bytes;
    uint8_t body_size;
    bool many;                  /* sent to a group or to broadcast */
    bool well_formed;           /* the body is one canonical map */
    struct pb_body body;        /* empty when not well formed */
    const struct pb_kind *kind; /* null when this version has no such kind */
};

/* Which of the two values a receipt carries, besides reason and key. */
enum pb_carries {
    PB_CARRIES_NOTHING,
    PB_CARRIES_EPOCH_AND_LEASE,
    PB_CARRIES_LEASE,
    PB_CARRIES_HOLDER,
    PB_CARRIES_HALT_COUNT,
    PB_CARRIES_MAJORS
};

#define PB_NO_KEY 0xFF

struct pb_receipt {
    uint8_t reason; /* 0: accepted */
    uint8_t key;    /* PB_NO_KEY: none named */
    uint8_t carries;
    uint32_t first; /* epoch, lease, holder or halt count */
    uint32_t second;
};

/* The value of an integer, enumeration or boolean field whose form and range are good; `otherwise` when absent. */
int64_t pb_request_number(const struct pb_request *request, uint8_t key, int64_t otherwise);
bool pb_request_has(const struct pb_request *request, uint8_t key);

#endif
