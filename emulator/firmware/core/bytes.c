#include "bytes.h"

void pb_copy(void *to, const void *from, size_t size)
{
    uint8_t *target = to;
    const uint8_t *source = from;
    while (size-- > 0)
        *target++ = *source++;
}

void pb_clear(void *to, size_t size)
{
    uint8_t *target = to;
    while (size-- > 0)
        *target++ = 0;
}

bool pb_equal(const void *a, const void *b, size_t size)
{
    const uint8_t *left = a;
    const uint8_t *right = b;
    while (size-- > 0)
        if (*left++ != *right++)
            return false;
    return true;
}

uint64_t pb_get(const uint8_t *from, unsigned size)
{
    uint64_t value = 0;
    while (size-- > 0)
        value = value << 8 | *from++;
    return value;
}

void pb_put(uint8_t *to, unsigned size, uint64_t value)
{
    while (size-- > 0) {
        to[size] = (uint8_t)(value & 0xFFu);
        value >>= 8;
    }
}
