#include "telemetry.h"

#include "bytes.h"
#include "module.h"

void pb_telemetry_off(struct pb_module *module)
{
    pb_clear(&module->telemetry, sizeof module->telemetry);
}

void pb_telemetry_on(struct pb_module *module, const struct pb_request *request)
{
    struct pb_telemetry *telemetry = &module->telemetry;
    telemetry->active = true;
    telemetry->source = request->header.source;
    telemetry->session = request->header.session;
    telemetry->number = request->header.number;
    telemetry->sequence = PB_VARIANT(telemetry_counts_from_one) ? 1 : 0;
    telemetry->period_us = 1000u * (uint64_t)pb_request_number(request, PB_KEY_TELEMETRY_ON_PERIOD, 0);
    telemetry->next_us = module->now_us + (PB_VARIANT(telemetry_begins_at_once) ? 0 : telemetry->period_us);
    telemetry->end_us =
        module->now_us + 1000u * (uint64_t)pb_request_number(request, PB_KEY_TELEMETRY_ON_DURATION, 0);
}

bool pb_telemetry_is_of(const struct pb_module *module, const struct pb_header *header)
{
    if (PB_VARIANT(anyone_ends_telemetry))
        return module->telemetry.active;
    return module->telemetry.active && module->telemetry.source == header->source &&
           module->telemetry.session == header->session;
}

uint64_t pb_telemetry_next_due(const struct pb_module *module)
{
    return module->telemetry.active ? module->telemetry.next_us : PB_NEVER;
}

/* Events keep to the grid of periods; those that a stall made late are left out, never sent in a heap. */
void pb_telemetry_send_due(struct pb_module *module)
{
    struct pb_telemetry *telemetry = &module->telemetry;
    if (!telemetry->active || telemetry->next_us > module->now_us || module->link_blocked)
        return;
    if (PB_VARIANT(telemetry_never_ends))
        telemetry->end_us = PB_NEVER;
    if (telemetry->next_us <= telemetry->end_us && !pb_encode_telemetry(module))
        return;
    telemetry->sequence++;
    const uint64_t late_us = module->now_us - telemetry->next_us;
    telemetry->next_us += (1u + late_us / telemetry->period_us) * telemetry->period_us;
    if (telemetry->next_us > telemetry->end_us && !PB_VARIANT(telemetry_never_ends))
        pb_telemetry_off(module);
}
