/* Activity, latches, clock, change number. */
#ifndef PB_STATE_H
#define PB_STATE_H

#include <stdbool.h>
#include <stdint.h>

#include "sizes.h"

struct pb_module;

/* The fields of status that the change number covers, as words. */
#define PB_VISIBLE_WORDS (16 + 3 * PB_MAX_FACES)

struct pb_state {
    uint8_t activity;
    bool halt_latch;
    bool fault_latch;
    uint32_t halt_count;
    uint8_t halt_cause;
    uint8_t restart_cause;
    uint64_t boot_us;
    uint32_t clock_offset_us; /* by assist only */
    uint64_t started_us;      /* when `starting` ends */
    bool tell_started;        /* the event is still to be sent */
    uint64_t identify_until_us;
    uint32_t change;
    uint32_t visible[PB_VISIBLE_WORDS]; /* as they were when `change` was last raised */
};

void pb_state_start(struct pb_module *module, uint8_t restart_cause);
void pb_state_end_starting(struct pb_module *module);

uint8_t pb_state_displayed(const struct pb_module *module);
uint32_t pb_state_clock(const struct pb_module *module, uint64_t time_us);

/* What the actuators do when nothing moves any more and something stands against moving: idle, or energized where an
 * actuator keeps power for every cause that applies. */
void pb_state_settle_power(struct pb_module *module);

void pb_state_energize(struct pb_module *module);
void pb_state_de_energize(struct pb_module *module);

/* A halt; returns the disposition it found. */
uint8_t pb_state_halt(struct pb_module *module, uint8_t halt_cause);

/* At power-up, when all is set: what is visible now has change number 0. */
void pb_state_begin_changes(struct pb_module *module);

/* After each input: raises the change number if a covered field changed, and stamps the events the input formed. */
void pb_state_note_change(struct pb_module *module);

#endif
