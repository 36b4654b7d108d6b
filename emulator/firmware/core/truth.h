/* The module's own log of what its actuators did, for the upper tester. */
#ifndef PB_TRUTH_H
#define PB_TRUTH_H

#include <stdint.h>

#include "sizes.h"

struct pb_module;

struct pb_truth_entry {
    uint32_t clock_us;
    uint8_t event;
    int32_t position;
};

struct pb_truth {
    uint32_t motion_starts;
    uint8_t first; /* ring */
    uint8_t count;
    struct pb_truth_entry entries[PB_MAX_TRUTH];
};

void pb_truth_start(struct pb_module *module);
void pb_truth_log(struct pb_module *module, uint8_t event);

/* Entry `age` counted from the newest, 0; age < count. */
const struct pb_truth_entry *pb_truth_entry(const struct pb_module *module, unsigned age);

#endif
