#include "crc.h"

#include "contract.h"

/* The polynomial with its bits in the order of a reflected register. */
static uint32_t reflect(uint32_t value)
{
    uint32_t reflected = 0;
    for (unsigned bit = 0; bit < 32; bit++)
        reflected |= ((value >> bit) & 1u) << (31u - bit);
    return reflected;
}

uint32_t pb_crc_begin(void)
{
    return PB_CRC_INITIAL;
}

/* Bit by bit: a frame of 253 bytes takes some 2,000 steps, and the program stays small. */
uint32_t pb_crc_add(uint32_t state, const uint8_t *bytes, size_t size)
{
    const uint32_t polynomial = reflect(PB_CRC_POLYNOMIAL);
    while (size-- > 0) {
        state ^= *bytes++;
        for (unsigned bit = 0; bit < 8; bit++)
            state = (state >> 1) ^ ((state & 1u) != 0 ? polynomial : 0u);
    }
    return state;
}

uint32_t pb_crc_end(uint32_t state)
{
    return state ^ PB_CRC_FINAL_XOR;
}

uint32_t pb_crc(const uint8_t *bytes, size_t size)
{
    return pb_crc_end(pb_crc_add(pb_crc_begin(), bytes, size));
}
