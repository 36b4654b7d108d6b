/* What was asked before: sessions, their numbers, and the receipts to repeat. */
#ifndef PB_HISTORY_H
#define PB_HISTORY_H

#include <stdbool.h>
#include <stdint.h>

#include "request.h"
#include "sizes.h"

struct pb_module;

struct pb_entry {
    uint32_t number;
    uint32_t digest;
    struct pb_receipt receipt;
};

struct pb_session {
    bool used;
    uint32_t source;
    uint32_t session;
    uint32_t highest;
    uint32_t seen; /* bit n: highest - n was seen */
    uint32_t last_use;
    uint8_t first; /* ring of the latest receipts */
    uint8_t count;
    struct pb_entry entries[PB_MAX_NUMBERS];
};

struct pb_history {
    uint32_t uses;
    struct pb_session sessions[PB_MAX_SESSIONS];
};

void pb_history_start(struct pb_module *module);

/* Digest of all that makes a command what it is: kind, flags, destination, body. */
uint32_t pb_history_digest(const struct pb_request *request);

/* Where a command's number stands. 0: newer, or the first of its session. REFUSAL_CONFLICT, _LATE_UNSEEN or
 * _ANSWER_EXPIRED: it is none to act on. PB_HISTORY_COPY: `copy` is what to repeat. Marks the session as used. */
#define PB_HISTORY_COPY 0xFF
uint8_t pb_history_compare(struct pb_module *module, const struct pb_request *request, struct pb_receipt *copy);

/* Makes a newer number the highest of its session, which is made if need be. */
struct pb_session *pb_history_consume(struct pb_module *module, const struct pb_header *header);

void pb_history_store(const struct pb_module *module, struct pb_session *session, const struct pb_request *request,
                      const struct pb_receipt *receipt);

#endif
