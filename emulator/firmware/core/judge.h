/* The verdict over a request, in the order of the contract's refusal table. Changes nothing. */
#ifndef PB_JUDGE_H
#define PB_JUDGE_H

#include "request.h"

struct pb_module;

/* Version, not-for-many and history are judged before. Reason 0: acceptable. */
struct pb_receipt pb_judge(struct pb_module *module, const struct pb_request *request);

/* A refusal with what its reason carries. */
struct pb_receipt pb_refusal(const struct pb_module *module, uint8_t reason, uint8_t key);

/* Reserved flags, the body's form, keys and types of fields; the row form of the table. 0: sound. */
uint8_t pb_judge_form(const struct pb_request *request, uint8_t *key);

#endif
