/* Telling faults: fault events, their spacing and repeats, confirms. */
#include "faults.h"
#include "module.h"

static const uint32_t REPEAT_FIRST_MS = PB_LIMIT_FAULT_REPEAT_FIRST;
static const uint32_t REPEAT_SLOWEST_MS = PB_LIMIT_FAULT_REPEAT_SLOWEST;
static const uint64_t SPACING_US = 1000u * PB_LIMIT_FAULT_EVENT_SPACING;

void pb_faults_announce(struct pb_module *module)
{
    for (unsigned i = 0; i <= module->config->faults; i++) {
        struct pb_fault *fault = &module->faults.list[i];
        if (!fault->latched || (PB_VARIANT(grant_announces_untold_only) && fault->told))
            continue;
        fault->told = false;
        fault->sendings = 0;
        fault->interval_ms = REPEAT_FIRST_MS;
        if (!PB_VARIANT(grant_announces_with_next_repeat))
            fault->next_send_us = module->now_us;
    }
}

bool pb_faults_confirm(struct pb_module *module, const struct pb_header *header, uint32_t event)
{
    for (unsigned i = 0; i <= module->config->faults; i++) {
        struct pb_fault *fault = &module->faults.list[i];
        if (!fault->used || fault->event != event || fault->told)
            continue;
        if (PB_VARIANT(confirm_clears_fault)) {
            fault->latched = false;
            pb_faults_after_clear(module);
        }
        const bool is_holder = pb_lease_is_holder(module, header->source, header->session);
        if (PB_VARIANT(stranger_confirms_fault) || !pb_fault_is_latching(fault->code) || is_holder) {
            fault->told = true;
            pb_faults_record_waiting(module);
        } else {
            fault->interval_ms = REPEAT_SLOWEST_MS;
            fault->next_send_us = module->now_us + 1000u * (uint64_t)REPEAT_SLOWEST_MS;
        }
        return true;
    }
    return false;
}

/* When this occurrence wants to be told next, spacing apart. */
static uint64_t wanted_us(const struct pb_fault *fault)
{
    if (!fault->used || fault->told)
        return PB_NEVER;
    if (PB_VARIANT(overflow_not_told) && fault->code == PB_FAULT_LIST_OVERFLOW)
        return PB_NEVER;
    if (PB_VARIANT(notice_repeated_for_ever))
        return fault->next_send_us;
    if (!pb_fault_is_latching(fault->code) && fault->sendings >= PB_NOTICE_SENDINGS)
        return PB_NEVER;
    return fault->next_send_us;
}

uint64_t pb_faults_next_due(const struct pb_module *module)
{
    const struct pb_faults *faults = &module->faults;
    uint64_t due_us = PB_NEVER;
    for (unsigned i = 0; i <= module->config->faults; i++)
        due_us = pb_earlier(due_us, wanted_us(&faults->list[i]));
    const bool is_spaced = faults->any_sent && !PB_VARIANT(fault_events_crowd);
    if (due_us != PB_NEVER && is_spaced && due_us < faults->last_sent_us + SPACING_US)
        due_us = faults->last_sent_us + SPACING_US;
    return due_us;
}

/* First tellings go before repeats, each in order of occurrence. */
static bool goes_before(const struct pb_fault *fault, const struct pb_fault *other)
{
    const bool is_first = fault->sendings == 0;
    if (is_first != (other->sendings == 0) && !PB_VARIANT(repeats_go_first))
        return is_first;
    return fault->occurrence < other->occurrence;
}

void pb_faults_send_due(struct pb_module *module)
{
    struct pb_fault *first = NULL;
    if (module->link_blocked || pb_faults_next_due(module) > module->now_us)
        return;
    for (unsigned i = 0; i <= module->config->faults; i++) {
        struct pb_fault *fault = &module->faults.list[i];
        if (wanted_us(fault) <= module->now_us && (first == NULL || goes_before(fault, first)))
            first = fault;
    }
    if (first == NULL || !pb_encode_fault(module, first))
        return;
    module->faults.any_sent = true;
    first->told = first->told || PB_VARIANT(fault_told_once);
    module->faults.last_sent_us = module->now_us;
    first->next_send_us = module->now_us + 1000u * (uint64_t)first->interval_ms;
    if (!PB_VARIANT(fault_repeats_every_500ms))
        first->interval_ms = first->interval_ms < REPEAT_SLOWEST_MS / 2 ? 2 * first->interval_ms : REPEAT_SLOWEST_MS;
    if (first->sendings < UINT8_MAX)
        first->sendings++;
    pb_faults_record_waiting(module);
}
