/* Frame header and check sequence. */
#ifndef PB_FRAME_H
#define PB_FRAME_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "contract.h"

struct pb_header {
    uint8_t version;
    uint8_t kind;
    uint8_t flags;
    uint8_t body_length;
    uint32_t source;
    uint32_t destination;
    uint32_t session;
    uint32_t number;
};

/* The ranges of kinds, the same in every major version. */
enum pb_kind_range { PB_RANGE_IS_READ, PB_RANGE_IS_COMMAND, PB_RANGE_IS_NOTICE, PB_RANGE_IS_OTHER };

/* Reads a bare frame of 24 to 253 bytes. Returns 0, or the drop reason too-short or crc; then nothing is believed. */
uint8_t pb_frame_read(const uint8_t *frame, size_t size, struct pb_header *header);

enum pb_kind_range pb_frame_range(uint8_t kind);

bool pb_address_is_unicast(uint32_t address);
bool pb_address_is_group(uint32_t address);

/* Completes a frame whose body already stands behind the room for the header. Returns the frame's size. */
size_t pb_frame_finish(uint8_t *frame, const struct pb_header *header, size_t body_size);

#endif
