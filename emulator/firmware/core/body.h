/* Reads a request's body: one canonical MessagePack map. One pass checks the form of everything and notes where the
 * top-level fields stand; no allocation, no recursion. */
#ifndef PB_BODY_H
#define PB_BODY_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "contract.h"

enum pb_type { PB_TYPE_NONE, PB_TYPE_INTEGER, PB_TYPE_BOOL, PB_TYPE_BYTES, PB_TYPE_TEXT, PB_TYPE_LIST, PB_TYPE_MAP };

struct pb_value {
    enum pb_type type;
    int64_t integer;     /* integers (above 2^63 - 1: 2^63 - 1, which no field's range reaches) and booleans */
    uint8_t size;        /* bytes of string or binary, items of a list, pairs of a map */
    uint8_t header_size; /* bytes before the contents */
};

struct pb_body {
    const uint8_t *bytes;
    uint8_t size;
    uint8_t pairs;
    uint8_t key[PB_BODY_PAIRS_MAX];
    uint8_t offset[PB_BODY_PAIRS_MAX];
};

/* False: malformed. The bytes are not copied and must outlive the body. */
bool pb_body_read(struct pb_body *body, const uint8_t *bytes, size_t size);

/* The value under a key; type PB_TYPE_NONE when there is none. `contents` may be null. */
struct pb_value pb_body_value(const struct pb_body *body, uint8_t key, const uint8_t **contents);

/* An item of a list whose contents begin at `contents`; moves `contents` behind it. Lists of plain values only: an
 * item that is a list or a map comes back as such and ends the walk. */
struct pb_value pb_body_item(const struct pb_body *body, const uint8_t **contents);

/* The lowest key of the body that must be understood and is not among the known ones; 0 when there is none. */
uint8_t pb_body_unknown_critical(const struct pb_body *body, const uint8_t *known, size_t known_count);

#endif
