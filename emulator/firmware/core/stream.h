/* Collects the blocks of a stream link, byte by byte, and lets half frames expire. */
#ifndef PB_STREAM_H
#define PB_STREAM_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "contract.h"

enum pb_stream_step {
    PB_STREAM_MORE,     /* nothing complete yet */
    PB_STREAM_BLOCK,    /* block[0 .. size) is one block without its delimiter */
    PB_STREAM_TOO_LONG, /* this byte made the block too long: it is skipped up to its delimiter */
};

struct pb_stream {
    uint8_t block[PB_STUFFED_SIZE_MAX];
    uint16_t size;
    bool ended;    /* the block was handed out: the next byte begins a new one */
    bool too_long; /* skipping what is left of a block that was too long */
    uint64_t last_byte_us;
};

void pb_stream_reset(struct pb_stream *stream);

/* True while a frame is begun and not ended. */
bool pb_stream_is_inside(const struct pb_stream *stream);

/* To be called before bytes of time now_us are taken. True: a half frame had expired and is discarded. A block that
 * was told too long before is not told again. */
bool pb_stream_expire(struct pb_stream *stream, uint64_t now_us);

enum pb_stream_step pb_stream_take(struct pb_stream *stream, uint64_t now_us, uint8_t byte);

#endif
