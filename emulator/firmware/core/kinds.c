#include "kinds.h"

#include <stddef.h>

#define PB_CLASS_READ false
#define PB_CLASS_COMMAND true

#define FIELD(key, type, required, minimum, maximum, items_min, items_max) \
    {PB_FIELD_##type, key, PB_REQUIRED_##required, items_min, items_max, minimum, maximum},
#define NO_MORE {PB_FIELD_END, 0, 0, 0, 0, 0, 0}

#define FIELDS_OF(NAME, code, class, answer, many, fence, needs) \
    static const struct pb_field FIELDS_##NAME[] = {PB_FIELDS_##NAME(FIELD) NO_MORE};
PB_KIND_TABLE(FIELDS_OF)
FIELDS_OF(CONFIRM, PB_KIND_CONFIRM, NOTICE, 0, 0, NONE, -1)

#define KIND_ROW(NAME, code, class, answer, many, fence, needs) \
    {code, PB_CLASS_##class, answer, many, PB_FENCE_##fence, needs, FIELDS_##NAME},
static const struct pb_kind KINDS[] = {
    PB_KIND_TABLE(KIND_ROW){PB_KIND_CONFIRM, false, 0, false, PB_FENCE_NONE, -1, FIELDS_CONFIRM},
};

const struct pb_kind *pb_kind_of(uint8_t code)
{
    for (size_t i = 0; i < sizeof KINDS / sizeof KINDS[0]; i++)
        if (KINDS[i].code == code)
            return &KINDS[i];
    return NULL;
}

uint8_t pb_kind_window_key(uint8_t code)
{
    switch (code) {
    case PB_KIND_HALT:
        return PB_KEY_HALT_ANSWER_WINDOW;
    case PB_KIND_PROBE:
        return PB_KEY_PROBE_ANSWER_WINDOW;
    case PB_KIND_RENEW_LEASE:
        return PB_KEY_RENEW_LEASE_ANSWER_WINDOW;
    case PB_KIND_TELEMETRY_OFF:
        return PB_KEY_TELEMETRY_OFF_ANSWER_WINDOW;
    case PB_KIND_ASSIGN_ADDRESS:
        return PB_KEY_ASSIGN_ADDRESS_ANSWER_WINDOW;
    default:
        return 0xFF;
    }
}
