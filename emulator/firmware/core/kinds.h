/* The kinds of requests and their fields, as data from the contract. */
#ifndef PB_KINDS_H
#define PB_KINDS_H

#include <stdbool.h>
#include <stdint.h>

#include "contract.h"

enum pb_field_type {
    PB_FIELD_END,
    PB_FIELD_UINT,
    PB_FIELD_INT,
    PB_FIELD_BOOL,
    PB_FIELD_BYTES,
    PB_FIELD_ENUM,
    PB_FIELD_LIST
};

enum pb_required { PB_REQUIRED_ALWAYS, PB_REQUIRED_UNICAST, PB_REQUIRED_OPTIONAL };

enum pb_fence { PB_FENCE_NONE, PB_FENCE_TAKE, PB_FENCE_FULL, PB_FENCE_MANY, PB_FENCE_EPOCH };

struct pb_field {
    uint8_t type;
    uint8_t key;
    uint8_t required;
    uint8_t items_min; /* items of a list, bytes of a binary */
    uint8_t items_max;
    int64_t minimum; /* of the number, or of each item */
    int64_t maximum;
};

struct pb_kind {
    uint8_t code;
    bool is_command;
    uint8_t answer;
    bool many;
    uint8_t fence;
    int8_t needs;                  /* capability, -1: none */
    const struct pb_field *fields; /* by ascending key, ended by PB_FIELD_END */
};

/* Null when this version has no such read, command or notice. */
const struct pb_kind *pb_kind_of(uint8_t code);

/* The key under which a kind that may go to many states its window; PB_NO_KEY-like 0xFF when it has none. */
uint8_t pb_kind_window_key(uint8_t code);

#endif
