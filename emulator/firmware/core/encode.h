/* Builds the frames a module sends. All return false when the link had no room: nothing was sent, try later. */
#ifndef PB_ENCODE_H
#define PB_ENCODE_H

#include <stdbool.h>

#include "answers.h"
#include "faults.h"
#include "slots.h"
#include "writer.h"

struct pb_module;

bool pb_encode_answer(struct pb_module *module, const struct pb_answer *answer);
bool pb_encode_outcome(struct pb_module *module, const struct pb_slot *slot);
bool pb_encode_fault(struct pb_module *module, const struct pb_fault *fault);
bool pb_encode_telemetry(struct pb_module *module);
bool pb_encode_started(struct pb_module *module);

/* Fields that answers and events share. */
void pb_encode_hardware_id(const struct pb_module *module, struct pb_writer *body, uint8_t key);
void pb_encode_temperatures(const struct pb_module *module, struct pb_writer *body, uint8_t key);

#endif
