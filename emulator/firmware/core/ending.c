/* How motions are stopped, and how those that never begin end. */
#include "ending.h"

#include "module.h"

/* Halt prevails over fault, fault over lease end, lease end over cancel, cancel over the rest. */
static unsigned strength(uint8_t cause)
{
    if (PB_VARIANT(first_cause_stays))
        return cause != PB_CAUSE_NONE;
    switch (cause) {
    case PB_CAUSE_HALT:
        return 4;
    case PB_CAUSE_FAULT:
        return PB_VARIANT(fault_outranks_halt) ? 5 : 3;
    case PB_CAUSE_LEASE_END:
        return 2;
    case PB_CAUSE_CANCEL:
        return 1;
    default:
        return 0;
    }
}

static uint8_t outcome_of(uint8_t cause, bool has_begun)
{
    if (cause == PB_CAUSE_HALT)
        return PB_VARIANT(halted_said_cancelled) ? PB_OUTCOME_CANCELLED : PB_OUTCOME_HALTED;
    return cause == PB_CAUSE_FAULT && has_begun ? PB_OUTCOME_FAILED : PB_OUTCOME_CANCELLED;
}

/* A motion that waits will never begin. */
static void end_waiting(struct pb_slot *slot, uint8_t cause)
{
    if (slot->ending && strength(cause) <= strength(slot->cause))
        return;
    slot->ending = true;
    slot->cause = cause;
    slot->outcome = outcome_of(cause, false);
}

void pb_ending_all_waiting(struct pb_module *module, enum pb_slot_state state, uint8_t cause)
{
    for (unsigned i = 0; i < module->config->outcomes; i++)
        if (module->slots.slots[i].state == state)
            end_waiting(&module->slots.slots[i], cause);
}

static void form_all(struct pb_module *module, enum pb_slot_state state)
{
    struct pb_slot *slot;
    while ((slot = pb_slots_first(module, state, true)) != NULL)
        pb_slots_form(module, slot, 0, 0);
}

/* Outcomes of motions that never began, once the module is at rest: the queued in order, then the scheduled. */
void pb_ending_form(struct pb_module *module)
{
    if (module->motion.running != NULL)
        return;
    form_all(module, PB_SLOT_QUEUED);
    form_all(module, PB_SLOT_SCHEDULED);
}

static void stop_running(struct pb_module *module, uint8_t cause)
{
    struct pb_motion *motion = &module->motion;
    struct pb_slot *slot = motion->running;
    if (slot == NULL || (PB_VARIANT(halt_lets_motion_end) && cause == PB_CAUSE_HALT))
        return;
    if (PB_VARIANT(fault_does_not_stop) && cause == PB_CAUSE_FAULT)
        return;
    if (motion->committed && !PB_VARIANT(committed_motion_stopped)) { /* it can only land */
        if (PB_VARIANT(interruption_not_noted))
            return;
        if (strength(cause) > strength(slot->interrupted))
            slot->interrupted = cause;
        return;
    }
    if (!motion->stopping) {
        motion->stopping = true;
        motion->held = false;
        motion->next_us = module->now_us + module->config->stop_delay_us * (PB_VARIANT(stop_takes_long) ? 6u : 1u);
        pb_plant_freeze(&module->plant, module->now_us);
    }
    if (strength(cause) > strength(slot->cause)) {
        slot->cause = cause;
        slot->outcome = outcome_of(cause, true);
    }
}

void pb_ending_stop_all(struct pb_module *module, uint8_t cause)
{
    stop_running(module, cause);
    if (PB_VARIANT(cancel_leaves_queue) && cause == PB_CAUSE_CANCEL)
        return;
    if (PB_VARIANT(queue_runs_though_halted) && cause == PB_CAUSE_HALT)
        return;
    if (!PB_VARIANT(halt_keeps_queue) || cause != PB_CAUSE_HALT)
        pb_ending_all_waiting(module, PB_SLOT_QUEUED, cause);
    pb_ending_all_waiting(module, PB_SLOT_SCHEDULED, cause);
    pb_ending_form(module);
}

/* The first motion that waits behind the one of that order and may still begin. */
static struct pb_slot *queued_behind(struct pb_module *module, uint32_t order)
{
    struct pb_slot *first = NULL;
    for (unsigned i = 0; i < module->config->outcomes; i++) {
        struct pb_slot *slot = &module->slots.slots[i];
        if (slot->state == PB_SLOT_QUEUED && !slot->ending && (int32_t)(slot->order - order) > 0 &&
            (first == NULL || (int32_t)(slot->order - first->order) < 0))
            first = slot;
    }
    return first;
}

void pb_ending_cancel(struct pb_module *module, struct pb_slot *slot)
{
    if (slot->state == PB_SLOT_RUNNING) {
        stop_running(module, PB_CAUSE_CANCEL);
        return;
    }
    const bool was_queued = slot->state == PB_SLOT_QUEUED;
    const uint32_t order = slot->order;
    end_waiting(slot, PB_CAUSE_CANCEL);
    pb_slots_form(module, slot, 0, 0); /* it needs no rest, nor do those behind it */
    struct pb_slot *other;
    while (was_queued && (other = queued_behind(module, order)) != NULL) {
        end_waiting(other, PB_CAUSE_PREDECESSOR);
        pb_slots_form(module, other, 0, 0);
    }
}
