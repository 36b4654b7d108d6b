/* The check sequence of frames, also used as digest of requests and as check value of stored records. */
#ifndef PB_CRC_H
#define PB_CRC_H

#include <stddef.h>
#include <stdint.h>

uint32_t pb_crc_begin(void);
uint32_t pb_crc_add(uint32_t state, const uint8_t *bytes, size_t size);
uint32_t pb_crc_end(uint32_t state);
uint32_t pb_crc(const uint8_t *bytes, size_t size);

#endif
