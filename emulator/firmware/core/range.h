/* The stage `range` of judging: the contract's ranges and what the module declares. */
#ifndef PB_RANGE_H
#define PB_RANGE_H

#include "request.h"

struct pb_module;

/* 0, or out-of-range with the lowest key. */
uint8_t pb_range_check(const struct pb_module *module, const struct pb_request *request, uint8_t *key);

bool pb_range_is_own_hardware_id(const struct pb_module *module, const struct pb_request *request);

/* Group addresses of a set-groups, ascending and each once. Returns how many there are; at most `capacity` are
 * written. */
unsigned pb_range_groups(const struct pb_request *request, uint32_t *groups, unsigned capacity);

#endif
