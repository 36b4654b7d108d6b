#include "judge.h"

#include "bytes.h"
#include "module.h"
#include "range.h"

struct pb_receipt pb_refusal(const struct pb_module *module, uint8_t reason, uint8_t key)
{
    struct pb_receipt receipt = {reason, key, PB_CARRIES_NOTHING, 0, 0};
    switch (reason) {
    case PB_REFUSAL_STALE_EPOCH:
    case PB_REFUSAL_STALE_LEASE:
        receipt.carries = PB_CARRIES_EPOCH_AND_LEASE;
        receipt.first = module->epoch;
        receipt.second = module->lease.number;
        break;
    case PB_REFUSAL_NOT_HOLDER:
    case PB_REFUSAL_LEASE_HELD:
        receipt.carries = PB_CARRIES_HOLDER;
        receipt.first = module->lease.source;
        receipt.second = module->lease.session;
        break;
    case PB_REFUSAL_NEWER_HALT:
        receipt.carries = PB_CARRIES_HALT_COUNT;
        receipt.first = module->state.halt_count;
        break;
    case PB_REFUSAL_UNSUPPORTED_VERSION:
        receipt.carries = PB_CARRIES_MAJORS;
        break;
    default:
        break;
    }
    return receipt;
}

/* ------------------------------------------------------------------------------------------------ fence */

/* All fenced kinds have epoch and lease under the same keys. */
enum { KEY_EPOCH = PB_KEY_MOVE_EPOCH, KEY_LEASE = PB_KEY_MOVE_LEASE };

static uint8_t check_epoch(const struct pb_module *module, const struct pb_request *request)
{
    const bool is_release = request->header.kind == PB_KIND_RELEASE_LEASE;
    if (PB_VARIANT(epoch_unchecked) || (PB_VARIANT(release_with_any_epoch) && is_release))
        return 0;
    return pb_request_number(request, KEY_EPOCH, -1) == module->epoch ? 0 : PB_REFUSAL_STALE_EPOCH;
}

static uint8_t check_epoch_and_lease(const struct pb_module *module, const struct pb_request *request)
{
    const uint8_t reason = check_epoch(module, request);
    if (reason != 0 || PB_VARIANT(lease_number_unchecked))
        return reason;
    return pb_request_number(request, KEY_LEASE, -1) == module->lease.number ? 0 : PB_REFUSAL_STALE_LEASE;
}

static bool is_holder(const struct pb_module *module, const struct pb_request *request)
{
    return pb_lease_is_holder(module, request->header.source, request->header.session);
}

static uint8_t fence_assignment_to_many(const struct pb_module *module, const struct pb_request *request)
{
    const uint8_t reason = check_epoch(module, request);
    if (reason != 0 && !PB_VARIANT(assign_to_many_any_epoch))
        return reason;
    if (PB_VARIANT(any_hardware_id_taken))
        return 0;
    if (!pb_range_is_own_hardware_id(module, request))
        return PB_REFUSAL_WRONG_MODULE;
    if (PB_VARIANT(assign_to_many_beside_lease))
        return 0;
    return module->lease.held && !is_holder(module, request) ? PB_REFUSAL_LEASE_HELD : 0;
}

static uint8_t fence_many(const struct pb_module *module, const struct pb_request *request)
{
    if (request->header.kind == PB_KIND_ASSIGN_ADDRESS)
        return fence_assignment_to_many(module, request);
    const bool may = request->header.kind == PB_KIND_TELEMETRY_OFF ? pb_telemetry_is_of(module, &request->header)
                                                                   : is_holder(module, request);
    return may || PB_VARIANT(anyone_renews_to_many) ? 0 : PB_REFUSAL_NOT_HOLDER;
}

static uint8_t fence(const struct pb_module *module, const struct pb_request *request)
{
    uint8_t reason;
    switch (request->kind->fence) {
    case PB_FENCE_NONE:
        return 0;
    case PB_FENCE_EPOCH:
        reason = check_epoch(module, request);
        if (PB_VARIANT(assist_needs_lease) && reason == 0 && !is_holder(module, request))
            return PB_REFUSAL_NOT_HOLDER;
        return reason;
    case PB_FENCE_TAKE:
        reason = check_epoch_and_lease(module, request);
        return reason == 0 && module->lease.held && !PB_VARIANT(lease_taken_over) ? PB_REFUSAL_LEASE_HELD : reason;
    default:
        if (request->many)
            return fence_many(module, request);
        reason = check_epoch_and_lease(module, request);
        if (PB_VARIANT(anyone_commands) || (PB_VARIANT(anyone_resets) && request->header.kind == PB_KIND_RESET))
            return reason;
        if (PB_VARIANT(anyone_releases) && request->header.kind == PB_KIND_RELEASE_LEASE)
            return reason;
        return reason == 0 && !is_holder(module, request) ? PB_REFUSAL_NOT_HOLDER : reason;
    }
}

/* ------------------------------------------------------------------------------------------------ capability */

static uint8_t check_capability(const struct pb_module *module, const struct pb_request *request, uint8_t *key)
{
    const uint8_t kind = request->header.kind;
    const bool is_hidden = (PB_VARIANT(identify_without_saying) && kind == PB_KIND_IDENTIFY) ||
                           (PB_VARIANT(assist_left_in) && kind == PB_KIND_ASSIST);
    if (request->kind->needs >= 0 && !is_hidden && !pb_config_has(module->config, (unsigned)request->kind->needs))
        return PB_REFUSAL_UNSUPPORTED;
    if (kind == PB_KIND_MOVE || kind == PB_KIND_DESCRIBE_MOTION) {
        const uint8_t motion_key = kind == PB_KIND_MOVE ? PB_KEY_MOVE_MOTION : PB_KEY_DESCRIBE_MOTION_MOTION;
        const int64_t motion = pb_request_number(request, motion_key, 0);
        /* a number that is no motion at all is out of range instead */
        const bool is_motion = motion >= PB_MOTION_PIVOT && motion <= PB_MOTION_UNBOND;
        if (PB_VARIANT(undeclared_motion_out_of_range) && kind == PB_KIND_MOVE)
            return 0;
        if (PB_VARIANT(undeclared_motion_described) && kind == PB_KIND_DESCRIBE_MOTION)
            return 0;
        if (is_motion && pb_config_motion(module->config, motion) == NULL) {
            *key = motion_key;
            return PB_REFUSAL_UNSUPPORTED;
        }
    }
    if (kind == PB_KIND_MOVE && pb_request_has(request, PB_KEY_MOVE_START_AT) && !PB_VARIANT(start_at_overlooked) &&
        !pb_config_has(module->config, PB_CAPABILITY_SCHEDULE)) {
        *key = PB_KEY_MOVE_START_AT;
        return PB_REFUSAL_UNSUPPORTED;
    }
    return 0;
}

/* ------------------------------------------------------------------------------------------------ state */

static uint8_t check_occurrences(struct pb_module *module, const struct pb_request *request)
{
    const uint8_t *contents;
    const struct pb_value list = pb_body_value(&request->body, PB_KEY_CLEAR_FAULTS_OCCURRENCES, &contents);
    bool stands = false;
    for (unsigned i = 0; i < list.size; i++) {
        const struct pb_fault *fault = pb_faults_latched(module, pb_body_item(&request->body, &contents).integer);
        if (fault == NULL)
            return PB_VARIANT(clear_skips_unknown) ? 0 : PB_REFUSAL_NO_SUCH_FAULT;
        stands = stands || pb_faults_is_standing(module, fault->code);
    }
    return stands && !PB_VARIANT(clears_what_stands) ? PB_REFUSAL_CAUSE_STANDS : 0;
}

static uint8_t check_move_state(const struct pb_module *module, const struct pb_request *request, uint8_t *key)
{
    if (module->state.halt_latch && !(PB_VARIANT(energize_while_halted) && request->header.kind == PB_KIND_ENERGIZE))
        return PB_REFUSAL_HALTED;
    const bool is_move = request->header.kind == PB_KIND_MOVE;
    const bool is_overlooked = PB_VARIANT(energizes_while_faulted) || (PB_VARIANT(move_while_faulted) && is_move);
    if (module->state.fault_latch && !is_overlooked)
        return PB_REFUSAL_FAULT_LATCHED;
    if (request->header.kind == PB_KIND_ENERGIZE)
        return 0;
    if (module->state.activity == PB_ACTIVITY_IDLE)
        return PB_REFUSAL_NOT_ENERGIZED;
    if (pb_request_number(request, PB_KEY_MOVE_ALLOW_LAST_BOND, 0) == 0 &&
        pb_motion_is_last_bond(module, (uint8_t)pb_request_number(request, PB_KEY_MOVE_MOTION, 0),
                               (uint8_t)pb_request_number(request, PB_KEY_MOVE_FACE, 0))) {
        *key = PB_KEY_MOVE_ALLOW_LAST_BOND;
        return PB_REFUSAL_LAST_BOND;
    }
    return 0;
}

static uint8_t check_cancel_state(struct pb_module *module, const struct pb_request *request)
{
    if (!pb_request_has(request, PB_KEY_CANCEL_NUMBER))
        return 0;
    const uint32_t number = (uint32_t)pb_request_number(request, PB_KEY_CANCEL_NUMBER, 0);
    if (pb_motion_find(module, request->header.source, request->header.session, number) == NULL)
        return PB_VARIANT(cancel_of_nothing_accepted) ? 0 : PB_REFUSAL_NO_SUCH_MOTION;
    return 0;
}

static uint8_t check_state(struct pb_module *module, const struct pb_request *request, uint8_t *key)
{
    const uint8_t activity = module->state.activity;
    const uint8_t moving = activity == PB_ACTIVITY_MOVING ? PB_REFUSAL_MOVING : 0;
    if (activity == PB_ACTIVITY_STARTING)
        return PB_REFUSAL_STARTING;
    switch (request->header.kind) {
    case PB_KIND_ENERGIZE:
    case PB_KIND_MOVE:
        return check_move_state(module, request, key);
    case PB_KIND_ASSIGN_ADDRESS:
        if (PB_VARIANT(address_assigned_while_energized) && activity == PB_ACTIVITY_ENERGIZED)
            return 0;
        return activity == PB_ACTIVITY_ENERGIZED ? PB_REFUSAL_ENERGIZED : moving;
    case PB_KIND_RESET:
        if (pb_request_number(request, PB_KEY_RESET_HALT_COUNT, -1) != module->state.halt_count &&
            !PB_VARIANT(reset_of_any_count))
            return PB_REFUSAL_NEWER_HALT;
        return PB_VARIANT(reset_while_moving) ? 0 : moving;
    case PB_KIND_IDENTIFY:
        return PB_VARIANT(identify_refused_halted) && module->state.halt_latch ? PB_REFUSAL_HALTED : 0;
    case PB_KIND_TAKE_LEASE:
    case PB_KIND_DE_ENERGIZE:
        return moving;
    case PB_KIND_CLEAR_FAULTS:
        return moving != 0 ? moving : check_occurrences(module, request);
    case PB_KIND_CANCEL:
        return check_cancel_state(module, request);
    default:
        return 0;
    }
}

/* ------------------------------------------------------------------------------------------------ time, queue */

static uint8_t check_time(const struct pb_module *module, const struct pb_request *request, uint8_t *key)
{
    if (!pb_request_has(request, PB_KEY_MOVE_START_AT))
        return 0;
    const uint32_t start_at = (uint32_t)pb_request_number(request, PB_KEY_MOVE_START_AT, 0);
    const uint32_t lead_us = start_at - pb_state_clock(module, module->now_us);
    *key = PB_KEY_MOVE_START_AT;
    if (PB_VARIANT(late_start_runs) && lead_us >= 0x80000000u) {
        *key = PB_NO_KEY;
        return 0;
    }
    if (PB_VARIANT(start_not_compared_modulo) && start_at < pb_state_clock(module, module->now_us))
        return PB_REFUSAL_LATE;
    if (lead_us >= 0x80000000u || lead_us < 1000u * PB_LIMIT_START_LEAD_MIN)
        return PB_REFUSAL_LATE;
    if (lead_us > 1000u * PB_LIMIT_START_LEAD_MAX && !PB_VARIANT(far_start_accepted))
        return PB_REFUSAL_TOO_FAR;
    *key = PB_NO_KEY;
    return 0;
}

static uint8_t check_places(const struct pb_module *module, const struct pb_request *request)
{
    if (!pb_motion_has_place(module, pb_request_has(request, PB_KEY_MOVE_START_AT)))
        return PB_REFUSAL_BUSY;
    return pb_slots_has_room(module) ? 0 : PB_REFUSAL_OUTCOMES_FULL;
}

/* ------------------------------------------------------------------------------------------------ the order */

static uint8_t judge(struct pb_module *module, const struct pb_request *request, uint8_t *key)
{
    uint8_t reason = pb_judge_form(request, key);
    if (reason == 0)
        reason = fence(module, request);
    if (PB_VARIANT(state_judged_before_range) && reason == 0 && request->kind->is_command)
        reason = check_state(module, request, key);
    if (PB_VARIANT(reads_refused_while_faulted) && reason == 0 && !request->kind->is_command &&
        request->header.kind == PB_KIND_READ_MOTIONS && module->state.fault_latch)
        reason = PB_REFUSAL_FAULT_LATCHED;
    if (reason == 0)
        reason = check_capability(module, request, key);
    if (reason == 0)
        reason = pb_range_check(module, request, key);
    if (reason == 0 && request->kind->is_command)
        reason = check_state(module, request, key);
    if (reason == 0 && request->header.kind == PB_KIND_MOVE)
        reason = check_time(module, request, key);
    if (reason == 0 && request->header.kind == PB_KIND_MOVE)
        reason = check_places(module, request);
    return reason;
}

struct pb_receipt pb_judge(struct pb_module *module, const struct pb_request *request)
{
    uint8_t key = PB_NO_KEY;
    const uint8_t reason = judge(module, request, &key);
    return pb_refusal(module, reason, key);
}
