/* Consistent overhead byte stuffing, for blocks of at most 254 stuffed bytes. */
#ifndef PB_COBS_H
#define PB_COBS_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

/* Unstuffs a block (no delimiter in it) in place. False: it is not the canonical encoding of anything. */
bool pb_cobs_decode(uint8_t *block, size_t size, size_t *decoded_size);

/* Stuffs at most 253 bytes into size + 1 bytes at `to`, no delimiter. Returns the number of bytes written. */
size_t pb_cobs_encode(const uint8_t *from, size_t size, uint8_t *to);

#endif
