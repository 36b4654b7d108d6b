/* The stage `form` of judging. */
#include "assist.h"
#include "judge.h"
#include "variant.h"

enum { FIELDS_MAX = 16 };

static uint8_t unknown_critical(const struct pb_request *request)
{
    uint8_t known[FIELDS_MAX];
    size_t count = 0;
    for (const struct pb_field *field = request->kind->fields; field->type != PB_FIELD_END; field++)
        if (count < FIELDS_MAX)
            known[count++] = field->key;
    return pb_body_unknown_critical(&request->body, known, count);
}

static bool is_list_of_integers(const struct pb_request *request, unsigned items, const uint8_t *contents)
{
    while (items-- > 0)
        if (pb_body_item(&request->body, &contents).type != PB_TYPE_INTEGER)
            return false;
    return true;
}

/* Numbers and enumerations of any sign, lists of any length: their values are a matter of range. */
static bool has_type(const struct pb_request *request, const struct pb_field *field)
{
    const uint8_t *contents;
    const struct pb_value value = pb_body_value(&request->body, field->key, &contents);
    switch (field->type) {
    case PB_FIELD_BOOL:
        return value.type == PB_TYPE_BOOL;
    case PB_FIELD_BYTES:
        return value.type == PB_TYPE_BYTES;
    case PB_FIELD_LIST:
        return value.type == PB_TYPE_LIST && is_list_of_integers(request, value.size, contents);
    default:
        return value.type == PB_TYPE_INTEGER;
    }
}

static bool is_required(const struct pb_request *request, const struct pb_field *field)
{
    if (PB_VARIANT(missing_field_is_zero) && field->key >= 2)
        return false;
    if (field->required == PB_REQUIRED_ALWAYS || field->required == PB_REQUIRED_UNICAST)
        return true;
    return request->header.kind == PB_KIND_ASSIST &&
           pb_assist_needs(pb_request_number(request, PB_KEY_ASSIST_OP, 0), field->key);
}

static bool is_bad(const struct pb_request *request, const struct pb_field *field)
{
    if (request->many && field->required == PB_REQUIRED_UNICAST)
        return false;
    return pb_request_has(request, field->key) ? !has_type(request, field) : is_required(request, field);
}

uint8_t pb_judge_form(const struct pb_request *request, uint8_t *key)
{
    *key = PB_NO_KEY;
    if (request->kind == NULL)
        return PB_REFUSAL_UNKNOWN_KIND;
    if (request->header.flags != 0 && !PB_VARIANT(flags_ignored))
        return PB_REFUSAL_NOT_UNDERSTOOD;
    if (!request->well_formed)
        return PB_REFUSAL_MALFORMED;
    const uint8_t critical = unknown_critical(request);
    if (critical != 0) {
        *key = critical;
        return PB_REFUSAL_NOT_UNDERSTOOD;
    }
    for (const struct pb_field *field = request->kind->fields; field->type != PB_FIELD_END; field++) {
        if (is_bad(request, field)) {
            *key = field->key;
            return PB_REFUSAL_MALFORMED;
        }
    }
    return 0;
}
