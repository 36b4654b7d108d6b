#include "request.h"

int64_t pb_request_number(const struct pb_request *request, uint8_t key, int64_t otherwise)
{
    const struct pb_value value = pb_body_value(&request->body, key, NULL);
    return value.type == PB_TYPE_INTEGER || value.type == PB_TYPE_BOOL ? value.integer : otherwise;
}

bool pb_request_has(const struct pb_request *request, uint8_t key)
{
    return pb_body_value(&request->body, key, NULL).type != PB_TYPE_NONE;
}
