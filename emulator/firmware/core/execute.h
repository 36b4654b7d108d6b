/* What an accepted request does. */
#ifndef PB_EXECUTE_H
#define PB_EXECUTE_H

#include "request.h"

struct pb_module;

/* `serial`: that of the receipt to come. The receipt may still become the refusal storage-failed. */
void pb_execute(struct pb_module *module, const struct pb_request *request, uint32_t serial,
                struct pb_receipt *receipt);

#endif
