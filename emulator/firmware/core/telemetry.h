/* Measurements at a stated interval, for a stated time. */
#ifndef PB_TELEMETRY_H
#define PB_TELEMETRY_H

#include <stdbool.h>
#include <stdint.h>

#include "request.h"

struct pb_module;

struct pb_telemetry {
    bool active;
    uint32_t source;
    uint32_t session;
    uint32_t number;
    uint32_t sequence;
    uint64_t period_us;
    uint64_t next_us;
    uint64_t end_us;
};

void pb_telemetry_off(struct pb_module *module);
void pb_telemetry_on(struct pb_module *module, const struct pb_request *request);
bool pb_telemetry_is_of(const struct pb_module *module, const struct pb_header *header);

uint64_t pb_telemetry_next_due(const struct pb_module *module);
void pb_telemetry_send_due(struct pb_module *module);

#endif
