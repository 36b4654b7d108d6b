/* The table of accepted motions: each takes one place from its acceptance until its outcome is confirmed, and is
 * then readable until the place is needed. */
#ifndef PB_SLOTS_H
#define PB_SLOTS_H

#include <stdbool.h>
#include <stdint.h>

#include "request.h"
#include "sizes.h"

struct pb_module;

enum pb_slot_state {
    PB_SLOT_FREE,
    PB_SLOT_QUEUED,
    PB_SLOT_SCHEDULED,
    PB_SLOT_RUNNING,
    PB_SLOT_FORMED,   /* has an outcome that is not confirmed */
    PB_SLOT_CONFIRMED
};

struct pb_slot {
    uint8_t state;
    uint8_t motion;
    uint8_t face;
    bool allow_last_bond;
    bool held;   /* kept in phase ready by assist */
    bool ending; /* will not begin; the outcome waits for rest */
    uint8_t outcome;
    uint8_t cause;
    uint8_t interrupted;
    uint32_t source;
    uint32_t session;
    uint32_t number;
    uint32_t receipt;  /* serial of its receipt among the unicast answers */
    uint32_t order;    /* of acceptance, then of forming */
    int32_t magnitude; /* asked for, then displacement made */
    uint64_t start_us; /* stated start, then real start */

    uint16_t duration_ms;
    uint32_t event;
    uint32_t change;
    bool unstamped; /* `change` is still to be filled in */
    uint8_t sendings;
    uint64_t next_send_us;
    uint64_t last_sent_us;
    bool resend; /* a copied request asked for it */
    uint32_t resend_after; /* serial of the receipt that goes first */
};

struct pb_slots {
    uint32_t orders;
    struct pb_slot slots[PB_MAX_OUTCOMES];
};

void pb_slots_start(struct pb_module *module);

bool pb_slots_has_room(const struct pb_module *module);

/* A place for a motion just accepted; only after pb_slots_has_room(). */
struct pb_slot *pb_slots_take(struct pb_module *module);

/* The first of its state that is not ending, in order; null when there is none. */
struct pb_slot *pb_slots_first(struct pb_module *module, enum pb_slot_state state, bool ending);

/* Motions of a state that still may begin, or outcomes of a state. */
unsigned pb_slots_count(const struct pb_module *module, enum pb_slot_state state);

/* Outcome and cause are set: the motion is over. */
void pb_slots_form(struct pb_module *module, struct pb_slot *slot, int32_t displacement, uint16_t duration_ms);

/* Formed outcomes, confirmed ones too; entry `age` from the newest, null past the end. */
unsigned pb_slots_formed(const struct pb_module *module);
const struct pb_slot *pb_slots_entry(const struct pb_module *module, unsigned age);

/* True: the confirm named an outcome of this module and came from one who may confirm it. */
bool pb_slots_confirm(struct pb_module *module, const struct pb_header *header, uint32_t event);

/* A copied move: its unconfirmed outcome follows the receipt of that serial. */
void pb_slots_ask_resend(struct pb_module *module, const struct pb_header *header, uint32_t receipt);

void pb_slots_stamp(struct pb_module *module, uint32_t change);

/* Sending. */
uint64_t pb_slots_next_due(const struct pb_module *module);
void pb_slots_send_due(struct pb_module *module);

#endif
