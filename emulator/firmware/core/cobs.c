#include "cobs.h"

#include "variant.h"

/* In a block of up to 254 bytes a code byte of 0xFF always runs past the end, and without that code every encoding
 * is the only one of what it decodes to. So running past the end is the one way not to be canonical. */
bool pb_cobs_decode(uint8_t *block, size_t size, size_t *decoded_size)
{
    size_t read = 0;
    size_t written = 0;
    while (read < size) {
        size_t code = block[read];
        if (PB_VARIANT(stuffing_overrun_taken) && code > size - read)
            code = size - read;
        if (code == 0 || code > size - read)
            return false;
        for (size_t i = 1; i < code; i++)
            block[written++] = block[read + i];
        read += code;
        if (read < size)
            block[written++] = 0;
    }
    *decoded_size = written;
    return true;
}

size_t pb_cobs_encode(const uint8_t *from, size_t size, uint8_t *to)
{
    size_t code_at = 0;
    size_t written = 1;
    for (size_t i = 0; i < size; i++) {
        if (from[i] == 0) {
            to[code_at] = (uint8_t)(written - code_at);
            code_at = written++;
        } else {
            to[written++] = from[i];
        }
    }
    to[code_at] = (uint8_t)(written - code_at);
    return written;
}
