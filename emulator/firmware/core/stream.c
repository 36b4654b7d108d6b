#include "stream.h"

#include "variant.h"

/* The contract leaves free what happens between the two limits: the middle keeps both with the greatest margin. */
static const uint64_t EXPIRY_US = 1000u * (PB_LIMIT_HALF_FRAME_BRIDGE + PB_LIMIT_HALF_FRAME_DISCARD) / 2u;

void pb_stream_reset(struct pb_stream *stream)
{
    stream->size = 0;
    stream->ended = false;
    stream->too_long = false;
    stream->last_byte_us = 0;
}

bool pb_stream_is_inside(const struct pb_stream *stream)
{
    return stream->size > 0 && !stream->ended;
}

bool pb_stream_expire(struct pb_stream *stream, uint64_t now_us)
{
    const uint64_t expiry_us = PB_VARIANT(half_frame_expires_early) ? 100000 : EXPIRY_US;
    if (PB_VARIANT(half_frame_never_expires))
        return false;
    if (!pb_stream_is_inside(stream) || now_us - stream->last_byte_us <= expiry_us)
        return false;
    const bool was_told = stream->too_long;
    pb_stream_reset(stream);
    return !was_told;
}

enum pb_stream_step pb_stream_take(struct pb_stream *stream, uint64_t now_us, uint8_t byte)
{
    if (stream->ended)
        pb_stream_reset(stream);
    stream->last_byte_us = now_us;
    if (byte == PB_DELIMITER) {
        if (stream->size == 0 && !PB_VARIANT(fill_is_a_frame))
            return PB_STREAM_MORE; /* fill */
        stream->ended = true;
        return stream->too_long ? PB_STREAM_MORE : PB_STREAM_BLOCK;
    }
    if (stream->size < sizeof stream->block) {
        stream->block[stream->size++] = byte;
        return PB_STREAM_MORE;
    }
    const bool was_told = stream->too_long;
    stream->too_long = true;
    return was_told && !PB_VARIANT(too_long_counted_by_byte) ? PB_STREAM_MORE : PB_STREAM_TOO_LONG;
}
