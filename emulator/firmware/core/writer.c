#include "writer.h"

#include "bytes.h"
#include "variant.h"

void pb_write_begin(struct pb_writer *writer, uint8_t *bytes, uint8_t capacity)
{
    writer->bytes = bytes;
    writer->capacity = capacity;
    writer->size = 0;
    writer->overflow = false;
}

static bool has_room(struct pb_writer *writer, unsigned size)
{
    if (size > (unsigned)writer->capacity - writer->size)
        writer->overflow = true;
    return !writer->overflow;
}

/* A first byte and `width` bytes of a big-endian number behind it. */
static void write_head(struct pb_writer *writer, uint8_t first, unsigned width, uint64_t number)
{
    if (!has_room(writer, 1u + width))
        return;
    writer->bytes[writer->size] = first;
    pb_put(writer->bytes + writer->size + 1, width, number);
    writer->size = (uint8_t)(writer->size + 1u + width);
}

void pb_write_map(struct pb_writer *writer, unsigned pairs)
{
    if (pairs < 16)
        write_head(writer, (uint8_t)(0x80u + pairs), 0, 0);
    else
        write_head(writer, 0xDE, 2, pairs);
}

void pb_write_list(struct pb_writer *writer, unsigned items)
{
    if (items < 16)
        write_head(writer, (uint8_t)(0x90u + items), 0, 0);
    else
        write_head(writer, 0xDC, 2, items);
}

static void write_unsigned(struct pb_writer *writer, uint64_t value)
{
    if (value <= 0x7F)
        write_head(writer, (uint8_t)value, 0, 0);
    else if (value <= UINT8_MAX)
        write_head(writer, 0xCC, 1, value);
    else if (value <= UINT16_MAX && !(PB_VARIANT(long_numbers_sent) && value > 900 && value < 1000))
        write_head(writer, 0xCD, 2, value);
    else if (value <= UINT32_MAX)
        write_head(writer, 0xCE, 4, value);
    else
        write_head(writer, 0xCF, 8, value);
}

void pb_write_integer(struct pb_writer *writer, int64_t value)
{
    if (value >= 0)
        write_unsigned(writer, (uint64_t)value);
    else if (value >= -32)
        write_head(writer, (uint8_t)(256 + value), 0, 0);
    else if (value >= INT8_MIN)
        write_head(writer, 0xD0, 1, (uint64_t)value);
    else if (value >= INT16_MIN)
        write_head(writer, 0xD1, 2, (uint64_t)value);
    else if (value >= INT32_MIN)
        write_head(writer, 0xD2, 4, (uint64_t)value);
    else
        write_head(writer, 0xD3, 8, (uint64_t)value);
}

void pb_write_bool(struct pb_writer *writer, bool value)
{
    write_head(writer, value ? 0xC3 : 0xC2, 0, 0);
}

void pb_write_bytes(struct pb_writer *writer, const uint8_t *bytes, unsigned size)
{
    if (!has_room(writer, 2u + size))
        return;
    write_head(writer, 0xC4, 1, size);
    pb_copy(writer->bytes + writer->size, bytes, size);
    writer->size = (uint8_t)(writer->size + size);
}

void pb_write_field(struct pb_writer *writer, uint8_t key, int64_t value)
{
    pb_write_integer(writer, key);
    pb_write_integer(writer, value);
}

void pb_write_bool_field(struct pb_writer *writer, uint8_t key, bool value)
{
    pb_write_integer(writer, key);
    pb_write_bool(writer, value);
}

void pb_write_bytes_field(struct pb_writer *writer, uint8_t key, const uint8_t *bytes, unsigned size)
{
    pb_write_integer(writer, key);
    pb_write_bytes(writer, bytes, size);
}

void pb_write_list_field(struct pb_writer *writer, uint8_t key, unsigned items)
{
    pb_write_integer(writer, key);
    pb_write_list(writer, items);
}
