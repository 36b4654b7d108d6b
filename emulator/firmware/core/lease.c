#include "lease.h"

#include "bytes.h"
#include "module.h"

void pb_lease_start(struct pb_module *module)
{
    pb_clear(&module->lease, sizeof module->lease);
}

bool pb_lease_is_holder(const struct pb_module *module, uint32_t source, uint32_t session)
{
    return module->lease.held && module->lease.source == source && module->lease.session == session;
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
    if (!PB_VARIANT(grant_tells_nothing))
        pb_faults_announce(module);
}

void pb_lease_extend(struct pb_module *module)
{
    module->lease.end_us = module->now_us + 1000u * (uint64_t)module->lease.duration_ms;
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
    module->lease.source = 0;
    module->lease.session = 0;
    if (!PB_VARIANT(lease_end_moves_on))
        pb_ending_stop_all(module, PB_CAUSE_LEASE_END);
    pb_state_settle_power(module);
}
