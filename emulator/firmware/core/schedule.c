/* What is due when, and in which order on the same instant. */
#include "module.h"

static uint64_t inputs_next_due(struct pb_module *module)
{
    uint64_t due_us = pb_motion_next_due(module);
    if (module->state.activity == PB_ACTIVITY_STARTING)
        due_us = pb_earlier(due_us, module->state.started_us);
    if (module->lease.held)
        due_us = pb_earlier(due_us, module->lease.end_us);
    if (pb_assist_restart_is_due(module))
        due_us = pb_earlier(due_us, module->now_us);
    return due_us;
}

static uint64_t sends_next_due(struct pb_module *module)
{
    if (module->link_blocked)
        return PB_NEVER;
    if (module->state.tell_started)
        return module->now_us;
    uint64_t due_us = pb_answers_next_due(module);
    due_us = pb_earlier(due_us, pb_faults_next_due(module));
    due_us = pb_earlier(due_us, pb_slots_next_due(module));
    return pb_earlier(due_us, pb_telemetry_next_due(module));
}

uint64_t pb_schedule_next_due(struct pb_module *module)
{
    return pb_earlier(inputs_next_due(module), sends_next_due(module));
}

/* One input that is due now, the first in the contract's order. False: none is. */
static bool take_input(struct pb_module *module)
{
    if (pb_assist_restart_is_due(module)) {
        pb_module_start(module, module->assist.restart_cause);
        return true;
    }
    if (module->state.activity == PB_ACTIVITY_STARTING && module->state.started_us <= module->now_us) {
        pb_state_end_starting(module);
        return true;
    }
    const bool is_wrapped = PB_VARIANT(clock_wrap_ends_lease) && module->lease.held &&
                            pb_state_clock(module, module->now_us) >= pb_state_clock(module, module->lease.end_us);
    if (is_wrapped || (module->lease.held && module->lease.end_us <= module->now_us)) {
        pb_lease_end(module);
        return true;
    }
    return pb_motion_step(module);
}

void pb_schedule_send(struct pb_module *module)
{
    pb_answers_send_halts(module);
    pb_answers_send_unicast(module);
    pb_faults_send_due(module);
    pb_slots_send_due(module);
    pb_answers_send_many(module);
    if (module->state.tell_started && pb_encode_started(module))
        module->state.tell_started = false;
    pb_telemetry_send_due(module);
}

void pb_schedule_run(struct pb_module *module, uint64_t limit_us, bool including)
{
    for (;;) {
        const uint64_t due_us = pb_schedule_next_due(module);
        if (due_us == PB_NEVER || due_us > limit_us || (due_us == limit_us && !including))
            return;
        if (due_us > module->now_us)
            module->now_us = due_us;
        if (take_input(module))
            pb_state_note_change(module);
        else
            pb_schedule_send(module);
    }
}
