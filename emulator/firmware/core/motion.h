/* Begins, follows and ends motions. */
#ifndef PB_MOTION_H
#define PB_MOTION_H

#include <stdbool.h>
#include <stdint.h>

#include "request.h"
#include "slots.h"

struct pb_module;

struct pb_motion {
    struct pb_slot *running; /* null at rest */
    uint8_t phase;           /* of the running motion: running, committed, settling */
    bool stopping;
    bool committed;     /* past its point of no return */
    bool held;          /* kept in its phase by assist */
    uint64_t next_us;   /* when the phase ends, or rest is reached */
    uint8_t hold_phase; /* phase in which the next motion is to be held; 0: none */
    bool position_known;
};

void pb_motion_start(struct pb_module *module);

/* Whether a move of this kind finds a place among those that wait. */
bool pb_motion_has_place(const struct pb_module *module, bool is_scheduled);

void pb_motion_accept(struct pb_module *module, const struct pb_request *request, uint32_t receipt);

/* A motion of that session that has not ended; null when there is none. */
struct pb_slot *pb_motion_find(struct pb_module *module, uint32_t source, uint32_t session, uint32_t number);

/* Whether an unbond of this face would open the only closed bond. */
bool pb_motion_is_last_bond(const struct pb_module *module, uint8_t motion, uint8_t face);

void pb_motion_hold(struct pb_module *module, uint8_t phase);
void pb_motion_release(struct pb_module *module);

uint64_t pb_motion_next_due(struct pb_module *module);

/* Takes one input that is due (rest, a phase's end, a begin). False: none was. */
bool pb_motion_step(struct pb_module *module);

#endif
