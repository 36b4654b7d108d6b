#include "assist.h"

#include "bytes.h"
#include "module.h"

void pb_assist_start(struct pb_module *module)
{
    pb_clear(&module->assist, sizeof module->assist);
}

bool pb_assist_needs(int64_t operation, uint8_t key)
{
    switch (key) {
    case PB_KEY_ASSIST_CODE:
        return operation == PB_ASSIST_OP_RAISE || operation == PB_ASSIST_OP_WITHDRAW;
    case PB_KEY_ASSIST_CAUSE:
        return operation == PB_ASSIST_OP_RESTART;
    case PB_KEY_ASSIST_WRITES:
        return operation == PB_ASSIST_OP_POWER_CUT;
    case PB_KEY_ASSIST_ITEM:
    case PB_KEY_ASSIST_VALUE:
        return operation == PB_ASSIST_OP_PRESET;
    case PB_KEY_ASSIST_PHASE:
        return operation == PB_ASSIST_OP_HOLD;
    default:
        return key == PB_KEY_ASSIST_EPOCH || key == PB_KEY_ASSIST_OP;
    }
}

bool pb_assist_uses(int64_t operation, uint8_t key)
{
    return pb_assist_needs(operation, key) ||
           (key == PB_KEY_ASSIST_SURVIVES && operation == PB_ASSIST_OP_RAISE);
}

static uint16_t bit(uint8_t code)
{
    return (uint16_t)(1u << code);
}

static void raise_condition(struct pb_module *module, uint8_t code, bool survives)
{
    if (survives)
        module->surviving |= bit(code);
    pb_faults_raise(module, code);
}

static void withdraw_condition(struct pb_module *module, uint8_t code)
{
    module->surviving &= (uint16_t)~bit(code);
    pb_faults_withdraw(module, code);
}

static void ask_restart(struct pb_module *module, uint8_t cause, uint32_t receipt)
{
    module->assist.restart_asked = true;
    module->assist.restart_cause = cause;
    module->assist.restart_after = receipt;
}

static uint8_t preset_epoch(struct pb_module *module, uint32_t value)
{
    struct pb_settings settings = module->storage.kept;
    settings.epoch = value;
    return pb_storage_commit(module, &settings) ? 0 : PB_REFUSAL_STORAGE_FAILED;
}

static uint8_t preset(struct pb_module *module, int64_t item, uint32_t value)
{
    switch (item) {
    case PB_PRESET_ITEM_CLOCK:
        if (PB_VARIANT(start_follows_clock))
            for (unsigned i = 0; i < module->config->outcomes; i++)
                module->slots.slots[i].start_us -= value - pb_state_clock(module, module->now_us);
        module->state.clock_offset_us = 0;
        module->state.clock_offset_us = value - pb_state_clock(module, module->now_us);
        return 0;
    case PB_PRESET_ITEM_COUNTERS:
        for (unsigned i = 0; i < PB_DROP_REASONS; i++)
            module->drops[i] = (uint16_t)value;
        module->silent_refusals = (uint16_t)value;
        return 0;
    case PB_PRESET_ITEM_CHANGE:
        module->state.change = value;
        return 0;
    case PB_PRESET_ITEM_LEASE:
        if (!PB_VARIANT(lease_preset_ignored))
            module->lease.number = value;
        return 0;
    case PB_PRESET_ITEM_EVENT:
        module->event_number = value;
        return 0;
    default:
        return preset_epoch(module, value);
    }
}

uint8_t pb_assist_execute(struct pb_module *module, const struct pb_request *request, uint32_t receipt)
{
    const uint8_t code = (uint8_t)pb_request_number(request, PB_KEY_ASSIST_CODE, 0);
    switch (pb_request_number(request, PB_KEY_ASSIST_OP, 0)) {
    case PB_ASSIST_OP_RAISE:
        raise_condition(module, code, pb_request_number(request, PB_KEY_ASSIST_SURVIVES, 0) != 0);
        return 0;
    case PB_ASSIST_OP_WITHDRAW:
        withdraw_condition(module, code);
        return 0;
    case PB_ASSIST_OP_RESTART:
        ask_restart(module, (uint8_t)pb_request_number(request, PB_KEY_ASSIST_CAUSE, 0), receipt);
        return 0;
    case PB_ASSIST_OP_POWER_CUT:
        module->storage.cut_at = (uint8_t)pb_request_number(request, PB_KEY_ASSIST_WRITES, 0);
        return 0;
    case PB_ASSIST_OP_PRESET:
        return preset(module, pb_request_number(request, PB_KEY_ASSIST_ITEM, 0),
                      (uint32_t)pb_request_number(request, PB_KEY_ASSIST_VALUE, 0));
    case PB_ASSIST_OP_HOLD:
        pb_motion_hold(module, (uint8_t)pb_request_number(request, PB_KEY_ASSIST_PHASE, 0));
        return 0;
    default:
        pb_motion_release(module);
        return 0;
    }
}

bool pb_assist_restart_is_due(const struct pb_module *module)
{
    if (PB_VARIANT(restart_before_receipt))
        return module->assist.restart_asked;
    return module->assist.restart_asked && pb_answers_have_left(module, module->assist.restart_after);
}
