#include "request.h"

#include "variant.h"

int64_t pb_request_number(const struct pb_request *request, uint8_t key, int64_t otherwise)
{
    const struct pb_value value = pb_body_value(&request->body, key, NULL);
    if (PB_VARIANT(false_counts_as_given) && value.type == PB_TYPE_BOOL)
        return 1;
    if (PB_VARIANT(page_zero_is_the_next) && request->header.kind == PB_KIND_READ_FAULTS && value.integer == 0)
        return value.type == PB_TYPE_INTEGER ? 1 : otherwise;
    return value.type == PB_TYPE_INTEGER || value.type == PB_TYPE_BOOL ? value.integer : otherwise;
}

bool pb_request_has(const struct pb_request *request, uint8_t key)
{
    return pb_body_value(&request->body, key, NULL).type != PB_TYPE_NONE;
}
