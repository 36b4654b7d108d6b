/* Bytes and words: the few helpers a freestanding core needs. */
#ifndef PB_BYTES_H
#define PB_BYTES_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

void pb_copy(void *to, const void *from, size_t size);
void pb_clear(void *to, size_t size);
bool pb_equal(const void *a, const void *b, size_t size);

/* Big-endian, size 1 to 8 bytes. */
uint64_t pb_get(const uint8_t *from, unsigned size);
void pb_put(uint8_t *to, unsigned size, uint64_t value);

#endif
