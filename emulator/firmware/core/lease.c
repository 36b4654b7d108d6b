#include "lease.h"

#include "bytes.h"
#include "module.h"

void pb_lease_start(struct pb_module *module)
{
    pb_clear(&module->lease, sizeof module->lease);
}

bool pb_lease_is_holder(const struct pb_module *module, uint32_t source, uint32_t session)
{
    const bool is_same = module->lease.session == session || PB_VARIANT(holder_known_by_address);
    return module->lease.held && module->lease.source == source && is_same;
}

void pb_lease_grant(struct pb_module *module, uint32_t source, uint32_t session, uint32_t duration_ms)
{
    module->lease.held = true;
    module->lease.source = source;
    module->lease.session = session;
    if (!PB_VARIANT(lease_number_stays))
        module->lease.number++;
    module->lease.duration_ms = duration_ms;
    pb_lease_extend(module);
    if (PB_VARIANT(started_told_at_grant))
        module->state.tell_started = true;
    if (!PB_VARIANT(grant_tells_nothing))
        pb_faults_announce(module);
}

void pb_lease_extend(struct pb_module *module)
{
    module->lease.end_us = module->now_us + 1000u * (uint64_t)module->lease.duration_ms;
    if (PB_VARIANT(lease_ends_early))
        module->lease.end_us -= 20000;
    if (PB_VARIANT(lease_lasts_longer))
        module->lease.end_us += 1000000u;
}

uint32_t pb_lease_remaining_ms(const struct pb_module *module)
{
    if (!module->lease.held || module->lease.end_us <= module->now_us)
        return 0;
    return (uint32_t)((module->lease.end_us - module->now_us + 999u) / 1000u);
}

void pb_lease_end(struct pb_module *module)
{
    module->lease.held = false;
    if (!PB_VARIANT(former_holder_told)) {
        module->lease.source = 0;
        module->lease.session = 0;
    }
    const bool is_left = PB_VARIANT(lease_end_leaves_scheduled) && module->motion.running == NULL;
    if (!PB_VARIANT(lease_end_moves_on) && !is_left)
        pb_ending_stop_all(module, PB_CAUSE_LEASE_END);
    if (PB_VARIANT(telemetry_ends_with_lease))
        pb_telemetry_off(module);
    if (!PB_VARIANT(lease_end_takes_no_power))
        pb_state_settle_power(module);
}
