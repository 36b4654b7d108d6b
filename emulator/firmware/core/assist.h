/* The upper tester's channel. */
#ifndef PB_ASSIST_H
#define PB_ASSIST_H

#include <stdbool.h>
#include <stdint.h>

#include "request.h"

struct pb_module;

struct pb_assist {
    bool restart_asked;
    uint8_t restart_cause;
    uint32_t restart_after; /* serial of the receipt that must leave first */
};

void pb_assist_start(struct pb_module *module);

/* Whether an operation needs, or can use, the field of this key. */
bool pb_assist_needs(int64_t operation, uint8_t key);
bool pb_assist_uses(int64_t operation, uint8_t key);

/* An accepted assist. Returns 0 or the refusal storage-failed. */
uint8_t pb_assist_execute(struct pb_module *module, const struct pb_request *request, uint32_t receipt);

bool pb_assist_restart_is_due(const struct pb_module *module);

#endif
