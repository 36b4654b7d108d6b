#include "truth.h"

#include "bytes.h"
#include "module.h"

void pb_truth_start(struct pb_module *module)
{
    pb_clear(&module->truth, sizeof module->truth);
}

void pb_truth_log(struct pb_module *module, uint8_t event)
{
    struct pb_truth *truth = &module->truth;
    if (event == PB_TRUTH_EVENT_MOTION_START && !PB_VARIANT(starts_counted_at_acceptance))
        truth->motion_starts++;
    struct pb_truth_entry *entry = &truth->entries[(truth->first + truth->count) % PB_MAX_TRUTH];
    if (truth->count < PB_MAX_TRUTH)
        truth->count++;
    else
        truth->first = (uint8_t)((truth->first + 1u) % PB_MAX_TRUTH);
    entry->clock_us = pb_state_clock(module, module->now_us);
    entry->event = event;
    entry->position = pb_plant_position(&module->plant, module->now_us);
}

const struct pb_truth_entry *pb_truth_entry(const struct pb_module *module, unsigned age)
{
    const struct pb_truth *truth = &module->truth;
    return &truth->entries[(truth->first + truth->count - 1u - age) % PB_MAX_TRUTH];
}
