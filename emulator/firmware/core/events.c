/* The events a module sends by itself: outcome, fault, telemetry, started. */
#include "encode.h"
#include "module.h"
#include "send.h"

bool pb_encode_outcome(struct pb_module *module, const struct pb_slot *slot)
{
    struct pb_outgoing outgoing;
    struct pb_writer *body = &outgoing.body;
    const bool has_energy = pb_config_has(module->config, PB_CAPABILITY_ENERGY);
    const bool was_interrupted = slot->interrupted != PB_CAUSE_NONE;
    pb_outgoing_begin(&outgoing, PB_KIND_OUTCOME, module->address);
    if (PB_VARIANT(outcome_goes_to_holder) && module->lease.held)
        pb_outgoing_to(&outgoing, module->lease.source, module->lease.session, slot->number);
    else
        pb_outgoing_to(&outgoing, slot->source, slot->session, slot->number);
    pb_write_map(body, 8u + has_energy + was_interrupted);
    pb_write_field(body, PB_KEY_OUTCOME_EVENT, slot->event);
    pb_write_field(body, PB_KEY_OUTCOME_EPOCH, module->epoch);
    pb_write_field(body, PB_KEY_OUTCOME_CHANGE,
                   PB_VARIANT(outcome_tells_change_of_now) ? module->state.change : slot->change);
    pb_write_field(body, PB_KEY_OUTCOME_MOTION, slot->motion);
    pb_write_field(body, PB_KEY_OUTCOME_OUTCOME, slot->outcome);
    pb_write_field(body, PB_KEY_OUTCOME_CAUSE, slot->cause);
    if (was_interrupted)
        pb_write_field(body, PB_KEY_OUTCOME_INTERRUPTED, slot->interrupted);
    pb_write_field(body, PB_KEY_OUTCOME_DISPLACEMENT, slot->magnitude);
    pb_write_field(body, PB_KEY_OUTCOME_DURATION_MS, slot->duration_ms);
    if (has_energy)
        pb_write_field(body, PB_KEY_OUTCOME_ENERGY_MJ,
                       (int64_t)((uint64_t)slot->duration_ms * module->config->power_mw / 1000u));
    return pb_outgoing_send(module, &outgoing);
}

bool pb_encode_fault(struct pb_module *module, const struct pb_fault *fault)
{
    struct pb_outgoing outgoing;
    struct pb_writer *body = &outgoing.body;
    pb_outgoing_begin(&outgoing, PB_KIND_FAULT, module->address);
    if (module->lease.held && !PB_VARIANT(fault_told_to_nobody))
        pb_outgoing_to(&outgoing, module->lease.source, module->lease.session, 0);
    else
        pb_outgoing_to(&outgoing, PB_ADDRESS_ANY_CONTROLLER, 0, 0);
    pb_write_map(body, 10);
    const uint32_t ahead = PB_VARIANT(fault_repeats_renumbered) ? fault->sendings : 0;
    pb_write_field(body, PB_KEY_FAULT_EVENT, fault->event + ahead);
    pb_write_field(body, PB_KEY_FAULT_EPOCH, module->epoch);
    pb_write_field(body, PB_KEY_FAULT_CHANGE, fault->change);
    pb_write_field(body, PB_KEY_FAULT_OCCURRENCE, fault->occurrence);
    pb_write_field(body, PB_KEY_FAULT_CODE, fault->code);
    pb_write_field(body, PB_KEY_FAULT_CLASS, pb_fault_class(fault->code));
    pb_write_field(body, PB_KEY_FAULT_SEVERITY,
                   pb_fault_is_latching(fault->code) ? PB_SEVERITY_LATCHING : PB_SEVERITY_NOTICE);
    pb_write_field(body, PB_KEY_FAULT_COUNT, fault->count);
    pb_write_field(body, PB_KEY_FAULT_TIME, fault->clock_us);
    pb_write_field(body, PB_KEY_FAULT_VALUE, fault->value);
    return pb_outgoing_send(module, &outgoing);
}

bool pb_encode_telemetry(struct pb_module *module)
{
    struct pb_outgoing outgoing;
    struct pb_writer *body = &outgoing.body;
    const struct pb_telemetry *telemetry = &module->telemetry;
    pb_outgoing_begin(&outgoing, PB_KIND_TELEMETRY, module->address);
    pb_outgoing_to(&outgoing, telemetry->source, telemetry->session, telemetry->number);
    pb_write_map(body, 7);
    pb_write_field(body, PB_KEY_TELEMETRY_SEQUENCE, telemetry->sequence);
    pb_write_field(body, PB_KEY_TELEMETRY_CHANGE, module->state.change);
    pb_write_field(body, PB_KEY_TELEMETRY_CLOCK, pb_state_clock(module, module->now_us));
    pb_write_field(body, PB_KEY_TELEMETRY_STATE, pb_state_displayed(module));
    pb_write_field(body, PB_KEY_TELEMETRY_POSITION, pb_plant_position(&module->plant, module->now_us));
    pb_write_field(body, PB_KEY_TELEMETRY_SUPPLY, module->config->supply_mv);
    pb_encode_temperatures(module, body, PB_KEY_TELEMETRY_TEMPERATURES);
    return pb_outgoing_send(module, &outgoing);
}

bool pb_encode_started(struct pb_module *module)
{
    struct pb_outgoing outgoing;
    struct pb_writer *body = &outgoing.body;
    pb_outgoing_begin(&outgoing, PB_KIND_STARTED, module->address);
    pb_outgoing_to(&outgoing, PB_ADDRESS_ANY_CONTROLLER, 0, 0);
    pb_write_map(body, 5);
    pb_write_field(body, PB_KEY_STARTED_EPOCH, module->epoch);
    pb_write_field(body, PB_KEY_STARTED_CHANGE, module->state.change);
    pb_write_field(body, PB_KEY_STARTED_RESTART_CAUSE, module->state.restart_cause);
    pb_encode_hardware_id(module, body, PB_KEY_STARTED_HARDWARE_ID);
    pb_write_field(body, PB_KEY_STARTED_NATURE, module->config->nature);
    return pb_outgoing_send(module, &outgoing);
}
