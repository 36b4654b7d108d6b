#include "range.h"

#include "bytes.h"
#include "module.h"

bool pb_range_is_own_hardware_id(const struct pb_module *module, const struct pb_request *request)
{
    const uint8_t *contents;
    const struct pb_value value = pb_body_value(&request->body, PB_KEY_ASSIGN_ADDRESS_HARDWARE_ID, &contents);
    return value.type == PB_TYPE_BYTES && value.size == PB_HARDWARE_ID_SIZE &&
           pb_equal(contents, module->config->hardware_id, PB_HARDWARE_ID_SIZE);
}

/* The least address of the list that is above `floor`; false when there is none. */
static bool next_group(const struct pb_request *request, int64_t floor, uint32_t *group)
{
    const uint8_t *contents;
    const struct pb_value list = pb_body_value(&request->body, PB_KEY_SET_GROUPS_GROUPS, &contents);
    bool is_found = false;
    for (unsigned i = 0; i < list.size; i++) {
        const int64_t item = pb_body_item(&request->body, &contents).integer;
        if (item > floor && (!is_found || item < *group)) {
            *group = (uint32_t)item;
            is_found = true;
        }
    }
    return is_found;
}

unsigned pb_range_groups(const struct pb_request *request, uint32_t *groups, unsigned capacity)
{
    uint32_t group = 0;
    unsigned count = 0;
    for (int64_t floor = 0; next_group(request, floor, &group); floor = group) {
        if (count < capacity)
            groups[count] = group;
        count++;
    }
    return count;
}

/* ------------------------------------------------------------------------------------------------ the contract's */

static bool list_is_in_range(const struct pb_request *request, const struct pb_field *field, unsigned items,
                             const uint8_t *contents)
{
    if (items < field->items_min || items > field->items_max)
        return false;
    while (items-- > 0) {
        const int64_t item = pb_body_item(&request->body, &contents).integer;
        if (item < field->minimum || item > field->maximum)
            return false;
    }
    return true;
}

static bool is_in_range(const struct pb_request *request, const struct pb_field *field)
{
    const uint8_t *contents;
    const struct pb_value value = pb_body_value(&request->body, field->key, &contents);
    switch (value.type) {
    case PB_TYPE_INTEGER:
        if (PB_VARIANT(lease_duration_not_checked) && field->maximum == PB_LIMIT_LEASE_DURATION_MAX)
            return value.integer > 0 && value.integer <= UINT16_MAX;
        if (PB_VARIANT(short_period_taken) && field->maximum == PB_LIMIT_TELEMETRY_PERIOD_MAX)
            return value.integer > 0 && value.integer <= field->maximum;
        if (PB_VARIANT(page_cut_to_a_byte) && field->maximum == UINT8_MAX)
            return true;
        return value.integer >= field->minimum && value.integer <= field->maximum;
    case PB_TYPE_BYTES:
        return value.size >= field->items_min && value.size <= field->items_max;
    case PB_TYPE_LIST:
        return list_is_in_range(request, field, value.size, contents);
    default:
        return true; /* absent, or a boolean */
    }
}

/* ------------------------------------------------------------------------------------------------ the module's */

static bool magnitude_is_declared(const struct pb_module *module, const struct pb_request *request)
{
    const int64_t motion = pb_request_number(request, PB_KEY_MOVE_MOTION, 0);
    const int64_t magnitude = pb_request_number(request, PB_KEY_MOVE_MAGNITUDE, 0);
    const struct pb_motion_config *config = pb_config_motion(module->config, motion);
    if (motion == PB_MOTION_BOND || motion == PB_MOTION_UNBOND)
        return magnitude == 0;
    if (PB_VARIANT(magnitude_clamped))
        return config != NULL;
    return config != NULL && magnitude >= config->magnitude_min && magnitude <= config->magnitude_max;
}

static bool face_is_declared(const struct pb_module *module, const struct pb_request *request)
{
    const int64_t motion = pb_request_number(request, PB_KEY_MOVE_MOTION, 0);
    const int64_t face = pb_request_number(request, PB_KEY_MOVE_FACE, 0);
    if (motion == PB_MOTION_BOND || motion == PB_MOTION_UNBOND)
        return face < module->config->face_count;
    return face == 0;
}

static bool assist_is_in_range(const struct pb_request *request, uint8_t key)
{
    const int64_t value = pb_request_number(request, key, 0);
    if (key == PB_KEY_ASSIST_CODE)
        return pb_fault_is_known(value);
    const bool is_counters = pb_request_number(request, PB_KEY_ASSIST_ITEM, 0) == PB_PRESET_ITEM_COUNTERS;
    return key != PB_KEY_ASSIST_VALUE || !is_counters || value <= PB_LIMIT_COUNTER_SATURATION;
}

/* Ranges that this module declares, or that depend on another field. */
static bool is_declared(const struct pb_module *module, const struct pb_request *request, uint8_t key)
{
    switch (request->header.kind) {
    case PB_KIND_MOVE:
        if (key == PB_KEY_MOVE_MAGNITUDE)
            return magnitude_is_declared(module, request);
        return key != PB_KEY_MOVE_FACE || face_is_declared(module, request);
    case PB_KIND_SET_GROUPS:
        return key != PB_KEY_SET_GROUPS_GROUPS || PB_VARIANT(groups_not_counted) ||
               pb_range_groups(request, NULL, 0) <= module->config->groups;
    case PB_KIND_ASSIGN_ADDRESS:
        return key != PB_KEY_ASSIGN_ADDRESS_HARDWARE_ID || PB_VARIANT(any_hardware_id_taken) ||
               pb_range_is_own_hardware_id(module, request);
    case PB_KIND_ASSIST:
        return assist_is_in_range(request, key);
    default:
        return true;
    }
}

/* To many, fields for unicast only are not looked at; nor are fields that an assist operation has no use for. */
static bool is_examined(const struct pb_request *request, const struct pb_field *field)
{
    if (request->many && field->required == PB_REQUIRED_UNICAST)
        return false;
    return request->header.kind != PB_KIND_ASSIST ||
           pb_assist_uses(pb_request_number(request, PB_KEY_ASSIST_OP, 0), field->key);
}

uint8_t pb_range_check(const struct pb_module *module, const struct pb_request *request, uint8_t *key)
{
    uint8_t reason = 0;
    for (const struct pb_field *field = request->kind->fields; field->type != PB_FIELD_END; field++) {
        if (!is_examined(request, field))
            continue;
        if (!is_in_range(request, field) || !is_declared(module, request, field->key)) {
            *key = field->key;
            reason = PB_REFUSAL_OUT_OF_RANGE;
            if (!PB_VARIANT(highest_key_named))
                break;
        }
    }
    return reason;
}
