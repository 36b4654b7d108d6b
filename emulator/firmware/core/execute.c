#include "execute.h"

#include "judge.h"
#include "module.h"
#include "range.h"

/* ------------------------------------------------------------------------------------------------ settings */

/* Nothing is changed when storage fails; that it fails is a fault of its own. */
static uint8_t commit(struct pb_module *module, struct pb_settings *settings)
{
    if (module->epoch_unsaved)
        settings->epoch = module->epoch;
    if (!pb_storage_commit(module, settings)) {
        if (!module->storage.power_failed)
            pb_faults_happen(module, PB_FAULT_STORAGE_FAILED);
        return PB_REFUSAL_STORAGE_FAILED;
    }
    if (module->epoch_unsaved)
        pb_faults_withdraw(module, PB_FAULT_STORAGE_FAILED);
    module->epoch_unsaved = false;
    return 0;
}

static uint8_t assign_address(struct pb_module *module, const struct pb_request *request)
{
    struct pb_settings settings = module->storage.kept;
    settings.address = (uint32_t)pb_request_number(request, PB_KEY_ASSIGN_ADDRESS_ADDRESS, 0);
    const uint8_t reason = commit(module, &settings);
    if (reason == 0)
        module->address = settings.address;
    return reason;
}

static uint8_t set_groups(struct pb_module *module, const struct pb_request *request)
{
    struct pb_settings settings = module->storage.kept;
    const unsigned capacity = PB_VARIANT(groups_not_counted) ? UINT8_MAX : PB_MAX_GROUPS;
    settings.group_count = (uint8_t)pb_range_groups(request, settings.groups, capacity);
    return commit(module, &settings);
}

/* ------------------------------------------------------------------------------------------------ the rest */

static void cancel(struct pb_module *module, const struct pb_request *request)
{
    if (!pb_request_has(request, PB_KEY_CANCEL_NUMBER)) {
        if (PB_VARIANT(cancel_hits_the_next) && module->motion.running == NULL)
            module->motion.stopping = true;
        pb_ending_stop_all(module, PB_CAUSE_CANCEL);
        return;
    }
    const uint32_t number = (uint32_t)pb_request_number(request, PB_KEY_CANCEL_NUMBER, 0);
    struct pb_slot *slot = pb_motion_find(module, request->header.source, request->header.session, number);
    if (PB_VARIANT(cancel_of_nothing_accepted) && slot == NULL)
        return;
    pb_ending_cancel(module, slot);
}

static void clear_faults(struct pb_module *module, const struct pb_request *request)
{
    const uint8_t *contents;
    const struct pb_value list = pb_body_value(&request->body, PB_KEY_CLEAR_FAULTS_OCCURRENCES, &contents);
    for (unsigned i = 0; i < list.size; i++) {
        struct pb_fault *fault = pb_faults_latched(module, pb_body_item(&request->body, &contents).integer);
        if (fault == NULL)
            continue; /* named twice */
        fault->latched = false;
        fault->told = !PB_VARIANT(cleared_fault_still_told); /* who clears it knows of it */
    }
    if (PB_VARIANT(clear_clears_all))
        for (unsigned i = 0; i <= module->config->faults; i++)
            module->faults.list[i].latched = false;
    pb_faults_after_clear(module);
}

static void renew(struct pb_module *module, const struct pb_request *request)
{
    module->lease.duration_ms = (uint32_t)pb_request_number(request, PB_KEY_RENEW_LEASE_DURATION, 0);
    pb_lease_extend(module);
}

static void de_energize(struct pb_module *module)
{
    pb_ending_stop_all(module, PB_VARIANT(de_energized_said_cancel) ? PB_CAUSE_CANCEL : PB_CAUSE_DE_ENERGIZED);
    pb_state_de_energize(module);
}

static void identify(struct pb_module *module, const struct pb_request *request)
{
    const uint64_t duration_ms = (uint64_t)pb_request_number(request, PB_KEY_IDENTIFY_DURATION, 0);
    module->state.identify_until_us = module->now_us + 1000u * duration_ms;
}

static void take_lease(struct pb_module *module, const struct pb_request *request, struct pb_receipt *receipt)
{
    pb_lease_grant(module, request->header.source, request->header.session,
                   (uint32_t)pb_request_number(request, PB_KEY_TAKE_LEASE_DURATION, 0));
    receipt->carries = PB_CARRIES_LEASE;
    receipt->first = module->lease.number;
}

/* Returns 0 or the refusal storage-failed. */
static uint8_t act(struct pb_module *module, const struct pb_request *request, uint32_t serial,
                   struct pb_receipt *receipt)
{
    switch (request->header.kind) {
    case PB_KIND_RESET:
        module->state.halt_latch = false;
        if (PB_VARIANT(reset_clears_fault_latch))
            module->state.fault_latch = false;
        if (PB_VARIANT(reset_energizes))
            pb_state_energize(module);
        return 0;
    case PB_KIND_TAKE_LEASE:
        take_lease(module, request, receipt);
        return 0;
    case PB_KIND_RENEW_LEASE:
        renew(module, request);
        return 0;
    case PB_KIND_RELEASE_LEASE:
        if (PB_VARIANT(release_keeps_motion) && module->motion.running != NULL)
            module->lease.held = false;
        else
            pb_lease_end(module);
        return 0;
    case PB_KIND_ENERGIZE:
        pb_state_energize(module);
        return 0;
    case PB_KIND_DE_ENERGIZE:
        de_energize(module);
        return 0;
    case PB_KIND_MOVE:
        pb_motion_accept(module, request, serial);
        return 0;
    case PB_KIND_CANCEL:
        cancel(module, request);
        return 0;
    case PB_KIND_CLEAR_FAULTS:
        clear_faults(module, request);
        return 0;
    case PB_KIND_TELEMETRY_ON:
        pb_telemetry_on(module, request);
        return 0;
    case PB_KIND_TELEMETRY_OFF:
        pb_telemetry_off(module);
        return 0;
    case PB_KIND_ASSIGN_ADDRESS:
        return assign_address(module, request);
    case PB_KIND_SET_GROUPS:
        return set_groups(module, request);
    case PB_KIND_IDENTIFY:
        identify(module, request);
        return 0;
    default:
        return pb_assist_execute(module, request, serial);
    }
}

void pb_execute(struct pb_module *module, const struct pb_request *request, uint32_t serial,
                struct pb_receipt *receipt)
{
    const uint8_t reason = act(module, request, serial, receipt);
    if (reason != 0) {
        *receipt = pb_refusal(module, reason, PB_NO_KEY);
        return;
    }
    bool extends = !request->many && request->header.kind != PB_KIND_ASSIST;
    if (PB_VARIANT(lease_extended_by_assist))
        extends = !request->many;
    if (PB_VARIANT(lease_extended_by_renewal_only))
        extends = false;
    if (extends && pb_lease_is_holder(module, request->header.source, request->header.session))
        pb_lease_extend(module);
}
