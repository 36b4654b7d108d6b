/* Endings of motions. */
#ifndef PB_ENDING_H
#define PB_ENDING_H

#include <stdint.h>

#include "slots.h"

struct pb_module;

/* Motions of a state that wait will not begin; a weaker cause does not replace a stronger one. */
void pb_ending_all_waiting(struct pb_module *module, enum pb_slot_state state, uint8_t cause);

/* Outcomes of motions that never began, once the module is at rest: the queued in order, then the scheduled. */
void pb_ending_form(struct pb_module *module);

/* Ends everything that runs or waits, for a cause of the contract. */
void pb_ending_stop_all(struct pb_module *module, uint8_t cause);

/* Ends one motion that runs or waits, by a cancel of its number. */
void pb_ending_cancel(struct pb_module *module, struct pb_slot *slot);

#endif
