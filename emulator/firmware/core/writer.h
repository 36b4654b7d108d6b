/* Writes a canonical MessagePack body into a frame. Running out of room is remembered, never written past. */
#ifndef PB_WRITER_H
#define PB_WRITER_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

struct pb_writer {
    uint8_t *bytes;
    uint8_t capacity;
    uint8_t size;
    bool overflow;
};

void pb_write_begin(struct pb_writer *writer, uint8_t *bytes, uint8_t capacity);
void pb_write_map(struct pb_writer *writer, unsigned pairs);
void pb_write_list(struct pb_writer *writer, unsigned items);
void pb_write_integer(struct pb_writer *writer, int64_t value);
void pb_write_bool(struct pb_writer *writer, bool value);
void pb_write_bytes(struct pb_writer *writer, const uint8_t *bytes, unsigned size);

/* A key and its value. */
void pb_write_field(struct pb_writer *writer, uint8_t key, int64_t value);
void pb_write_bool_field(struct pb_writer *writer, uint8_t key, bool value);
void pb_write_bytes_field(struct pb_writer *writer, uint8_t key, const uint8_t *bytes, unsigned size);
void pb_write_list_field(struct pb_writer *writer, uint8_t key, unsigned items);

#endif
