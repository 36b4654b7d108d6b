#include "state.h"

#include "bytes.h"
#include "module.h"

void pb_state_start(struct pb_module *module, uint8_t restart_cause)
{
    struct pb_state *state = &module->state;
    pb_clear(state, sizeof *state);
    state->activity = PB_ACTIVITY_STARTING;
    state->halt_latch = !PB_VARIANT(start_not_halted);
    state->halt_count = 1;
    state->halt_cause = PB_HALT_CAUSE_RESTART;
    state->restart_cause = PB_VARIANT(restart_cause_power_on) ? PB_RESTART_CAUSE_POWER_ON : restart_cause;
    state->boot_us = module->now_us;
    state->started_us = module->now_us + module->config->starting_delay_us;
}

void pb_state_end_starting(struct pb_module *module)
{
    module->state.activity = PB_ACTIVITY_IDLE;
    module->state.started_us = PB_NEVER;
    module->state.tell_started = true;
}

uint8_t pb_state_displayed(const struct pb_module *module)
{
    const struct pb_state *state = &module->state;
    if (state->activity == PB_ACTIVITY_STARTING)
        return PB_STATE_STARTING;
    const bool is_latched = (state->halt_latch || state->fault_latch) && !PB_VARIANT(stopping_shown_as_moving);
    if (state->activity == PB_ACTIVITY_MOVING)
        return is_latched ? PB_STATE_STOPPING : PB_STATE_MOVING;
    if (state->fault_latch && !(PB_VARIANT(halted_shown_over_faulted) && state->halt_latch))
        return PB_STATE_FAULTED;
    if (state->halt_latch)
        return PB_STATE_HALTED;
    return state->activity == PB_ACTIVITY_ENERGIZED ? PB_STATE_ENERGIZED : PB_STATE_IDLE;
}

uint32_t pb_state_clock(const struct pb_module *module, uint64_t time_us)
{
    uint64_t since_us = time_us - module->state.boot_us;
    if (PB_VARIANT(clock_two_percent_fast))
        since_us += since_us / 50;
    return (uint32_t)since_us + module->state.clock_offset_us;
}

/* Whether an actuator keeps its power for every cause that stands against moving now. */
static bool keeps_power(const struct pb_module *module, const struct pb_motion_config *motion)
{
    if (PB_VARIANT(halt_keeps_power) && module->state.halt_latch)
        return true;
    if (PB_VARIANT(fault_keeps_power) && module->state.fault_latch)
        return true;
    if (PB_VARIANT(holding_axis_lets_go))
        return !module->state.halt_latch && !module->state.fault_latch && module->lease.held;
    return (!module->state.halt_latch || motion->halt_category == PB_STOP_CATEGORY_CAT_2) &&
           (!module->state.fault_latch || motion->fault_category == PB_STOP_CATEGORY_CAT_2) &&
           (module->lease.held || motion->lease_end_category == PB_STOP_CATEGORY_CAT_2);
}

void pb_state_settle_power(struct pb_module *module)
{
    if (module->state.activity != PB_ACTIVITY_ENERGIZED)
        return;
    for (unsigned i = 0; i < module->config->motion_count; i++)
        if (keeps_power(module, &module->config->motions[i]))
            return;
    pb_state_de_energize(module);
}

void pb_state_energize(struct pb_module *module)
{
    if (module->state.activity != PB_ACTIVITY_IDLE)
        return;
    module->state.activity = PB_ACTIVITY_ENERGIZED;
    pb_plant_power(&module->plant, true);
    if (PB_VARIANT(energize_twitches))
        module->plant.position++;
    pb_truth_log(module, PB_TRUTH_EVENT_ENERGIZED);
}

void pb_state_de_energize(struct pb_module *module)
{
    if (module->state.activity != PB_ACTIVITY_ENERGIZED)
        return;
    module->state.activity = PB_ACTIVITY_IDLE;
    pb_plant_power(&module->plant, PB_VARIANT(de_energize_in_words_only));
    pb_truth_log(module, PB_TRUTH_EVENT_DE_ENERGIZED);
}

uint8_t pb_state_halt(struct pb_module *module, uint8_t halt_cause)
{
    uint8_t disposition = PB_DISPOSITION_AT_REST;
    if (module->motion.running != NULL)
        disposition = module->motion.committed ? PB_DISPOSITION_PAST_NO_RETURN : PB_DISPOSITION_STOPPING;
    if (!PB_VARIANT(halt_counted_once) || !module->state.halt_latch)
        module->state.halt_count++;
    if (!PB_VARIANT(halt_ignored_while_faulted) || !module->state.fault_latch)
        module->state.halt_latch = true;
    module->state.halt_cause = halt_cause;
    if (PB_VARIANT(halt_says_at_rest))
        disposition = PB_DISPOSITION_AT_REST;
    if (PB_VARIANT(halt_extends_lease) && module->lease.held)
        pb_lease_extend(module);
    pb_ending_stop_all(module, PB_CAUSE_HALT);
    pb_state_settle_power(module);
    return disposition;
}

/* Keys 1 to 18 of status, as words. */
static void collect_visible(const struct pb_module *module, uint32_t *words)
{
    const struct pb_state *state = &module->state;
    const struct pb_lease *lease = &module->lease;
    const uint32_t fixed[] = {
        module->epoch,
        pb_state_displayed(module),
        state->activity,
        (uint32_t)state->halt_latch | (uint32_t)state->fault_latch << 1 |
            (uint32_t)module->motion.position_known << 2,
        state->halt_count,
        state->halt_cause,
        state->restart_cause,
        lease->number,
        lease->source,
        lease->session,
        pb_slots_count(module, PB_SLOT_QUEUED),
        pb_slots_count(module, PB_SLOT_SCHEDULED),
        pb_slots_count(module, PB_SLOT_FORMED),
        (uint32_t)module->plant.position,
        pb_faults_latched_count(module),
    };
    pb_copy(words, fixed, sizeof fixed);
    words += sizeof fixed / sizeof fixed[0];
    for (unsigned i = 0; i < module->plant.face_count; i++) {
        *words++ = module->plant.faces[i].bonded;
        *words++ = module->plant.faces[i].neighbour;
        *words++ = module->plant.faces[i].orientation;
    }
}

void pb_state_begin_changes(struct pb_module *module)
{
    module->state.change = 0;
    pb_clear(module->state.visible, sizeof module->state.visible);
    collect_visible(module, module->state.visible);
}

void pb_state_note_change(struct pb_module *module)
{
    uint32_t words[PB_VISIBLE_WORDS] = {0};
    collect_visible(module, words);
    if (PB_VARIANT(change_leaves_out_holder))
        words[8] = words[9] = 0;
    if (PB_VARIANT(change_leaves_out_halt_count))
        words[4] = 0;
    if (!pb_equal(words, module->state.visible, sizeof words) || PB_VARIANT(change_raised_by_everything)) {
        pb_copy(module->state.visible, words, sizeof words);
        module->state.change++;
    }
    pb_slots_stamp(module, module->state.change);
    pb_faults_stamp(module, module->state.change);
}
