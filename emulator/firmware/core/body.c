#include "body.h"

#include "bytes.h"
#include "variant.h"

/* First bytes of MessagePack values (the format's own published table). */
enum {
    POSITIVE_FIXINT_LAST = 0x7F,
    FIXMAP = 0x80,
    FIXARRAY = 0x90,
    FIXSTR = 0xA0,
    FIXSTR_LAST = 0xBF,
    FALSE_BYTE = 0xC2,
    TRUE_BYTE = 0xC3,
    BIN8 = 0xC4,
    UINT8 = 0xCC,
    UINT64 = 0xCF,
    INT8 = 0xD0,
    INT64 = 0xD3,
    STR8 = 0xD9,
    ARRAY16 = 0xDC,
    MAP16 = 0xDE,
    NEGATIVE_FIXINT = 0xE0
};

static const struct pb_value NOT_A_VALUE = {PB_TYPE_NONE, 0, 0, 0};

static struct pb_value value_of(enum pb_type type, int64_t integer, unsigned size, unsigned header_size)
{
    struct pb_value value = {type, integer, (uint8_t)size, (uint8_t)header_size};
    return value;
}

/* Unsigned integer of 1, 2, 4 or 8 bytes behind its first byte: the next shorter form must be too small for it. */
static struct pb_value read_unsigned(const uint8_t *at, size_t left)
{
    const unsigned width = 1u << (at[0] - UINT8);
    if (left < 1u + width)
        return NOT_A_VALUE;
    const uint64_t number = pb_get(at + 1, width);
    const uint64_t shorter_last = width == 1 ? POSITIVE_FIXINT_LAST : ((uint64_t)1 << (4u * width)) - 1u;
    if (PB_VARIANT(integer_read_as_signed) && width == 4 && number > INT32_MAX)
        return value_of(PB_TYPE_INTEGER, (int64_t)number - ((int64_t)1 << 32), 0, 1u + width);
    if (number <= shorter_last && !PB_VARIANT(long_integers_taken))
        return NOT_A_VALUE;
    return value_of(PB_TYPE_INTEGER, number > INT64_MAX ? INT64_MAX : (int64_t)number, 0, 1u + width);
}

/* Two's complement of the given width, without relying on the conversion of large values. */
static int64_t sign_extended(uint64_t bits, unsigned width)
{
    const uint64_t sign = (uint64_t)1 << (8u * width - 1u);
    if ((bits & sign) == 0)
        return (int64_t)bits;
    const uint64_t below = ~bits & (sign - 1u); /* the value is -below - 1 */
    return -(int64_t)below - 1;
}

/* Signed integer: only negative ones, and only when the next shorter form does not reach so low. */
static struct pb_value read_signed(const uint8_t *at, size_t left)
{
    const unsigned width = 1u << (at[0] - INT8);
    if (left < 1u + width)
        return NOT_A_VALUE;
    const int64_t number = sign_extended(pb_get(at + 1, width), width);
    if (PB_VARIANT(short_negative_loses_sign) && width == 2)
        return value_of(PB_TYPE_INTEGER, (int64_t)pb_get(at + 1, width), 0, 1u + width);
    const int64_t shorter_first = width == 1 ? -32 : -((int64_t)1 << (4u * width - 1u));
    if (number >= shorter_first)
        return NOT_A_VALUE;
    return value_of(PB_TYPE_INTEGER, number, 0, 1u + width);
}

static struct pb_value read_text(const uint8_t *at, size_t left, size_t size, size_t header_size)
{
    if (size > PB_BODY_STRING_SIZE_MAX || size > left - header_size)
        return NOT_A_VALUE;
    for (size_t i = 0; i < size && !PB_VARIANT(text_not_checked); i++)
        if (at[header_size + i] < 0x20 || at[header_size + i] > 0x7E)
            return NOT_A_VALUE;
    return value_of(PB_TYPE_TEXT, 0, (unsigned)size, (unsigned)header_size);
}

static struct pb_value read_bytes(size_t left, size_t size, size_t header_size)
{
    const bool is_there = size <= left - header_size || PB_VARIANT(claimed_size_trusted);
    if (size > PB_BODY_BINARY_SIZE_MAX || !is_there)
        return NOT_A_VALUE;
    return value_of(PB_TYPE_BYTES, 0, (unsigned)size, (unsigned)header_size);
}

/* A list or map: every item takes at least one byte, every pair two. */
static struct pb_value read_container(enum pb_type type, size_t left, size_t count, size_t header_size)
{
    const size_t count_max = type == PB_TYPE_MAP ? PB_BODY_PAIRS_MAX : PB_BODY_ITEMS_MAX;
    const size_t bytes_each = type == PB_TYPE_MAP ? 2 : 1;
    if (count > count_max || count * bytes_each > left - header_size)
        return NOT_A_VALUE;
    return value_of(type, 0, (unsigned)count, (unsigned)header_size);
}

static struct pb_value read_sized(const uint8_t *at, size_t left)
{
    const uint8_t first = at[0];
    const size_t header_size = first == BIN8 || first == STR8 ? 2 : 3;
    if (left < header_size)
        return NOT_A_VALUE;
    const size_t size = (size_t)pb_get(at + 1, (unsigned)header_size - 1u);
    if (first == BIN8)
        return read_bytes(left, size, header_size);
    if (first == STR8)
        return size > FIXSTR_LAST - FIXSTR ? read_text(at, left, size, header_size) : NOT_A_VALUE;
    if (size <= 0x0F)
        return NOT_A_VALUE;
    return read_container(first == ARRAY16 ? PB_TYPE_LIST : PB_TYPE_MAP, left, size, header_size);
}

/* One value's header, and the contents of a string or binary. PB_TYPE_NONE: not canonical, or cut short. */
static struct pb_value read_value(const uint8_t *at, size_t left)
{
    if (left == 0)
        return NOT_A_VALUE;
    const uint8_t first = at[0];
    if (first <= POSITIVE_FIXINT_LAST)
        return value_of(PB_TYPE_INTEGER, first, 0, 1);
    if (first >= NEGATIVE_FIXINT)
        return value_of(PB_TYPE_INTEGER, (int64_t)first - 256, 0, 1);
    if (first < FIXARRAY)
        return read_container(PB_TYPE_MAP, left, first - FIXMAP, 1);
    if (first < FIXSTR)
        return read_container(PB_TYPE_LIST, left, first - FIXARRAY, 1);
    if (first <= FIXSTR_LAST)
        return read_text(at, left, first - FIXSTR, 1);
    if (PB_VARIANT(nil_taken) && first == 0xC0)
        return value_of(PB_TYPE_BOOL, 0, 0, 1);
    if (PB_VARIANT(float_taken_for_its_bits) && first == 0xCA && left >= 5)
        return value_of(PB_TYPE_INTEGER, (int64_t)pb_get(at + 1, 4), 0, 5);
    if (first == FALSE_BYTE || first == TRUE_BYTE)
        return value_of(PB_TYPE_BOOL, first == TRUE_BYTE, 0, 1);
    if (first >= UINT8 && first <= UINT64)
        return read_unsigned(at, left);
    if (first >= INT8 && first <= INT64)
        return read_signed(at, left);
    if (first == BIN8 || first == STR8 || first == ARRAY16 || first == MAP16)
        return read_sized(at, left);
    return NOT_A_VALUE; /* nil, floats, extensions, 0xC1, and headers that are never the shortest within the bounds */
}

/* An open container of the walk. */
struct level {
    uint8_t left; /* values still to come: items, or pairs */
    bool is_map;
    int16_t last_key;
};

/* Takes the key of a map's next pair; false when it is no such key. */
static bool take_key(struct level *level, const uint8_t *bytes, size_t size, size_t *at)
{
    if (*at >= size || bytes[*at] > PB_BODY_KEY_LAST)
        return false;
    if (bytes[*at] <= level->last_key && !(PB_VARIANT(duplicate_keys_taken) && bytes[*at] == level->last_key))
        return false;
    level->last_key = bytes[*at];
    *at += 1;
    return true;
}

bool pb_body_read(struct pb_body *body, const uint8_t *bytes, size_t size)
{
    struct level levels[PB_BODY_DEPTH_MAX];
    unsigned depth = 0;
    size_t at = 0;
    body->bytes = bytes;
    body->size = (uint8_t)size;
    body->pairs = 0;
    if (PB_VARIANT(no_bytes_taken_for_empty_map) && size == 0)
        return true;
    if (size > PB_BODY_SIZE_MAX)
        return false;
    for (;;) {
        if (depth > 0 && levels[depth - 1].is_map) {
            if (!take_key(&levels[depth - 1], bytes, size, &at))
                return false;
            if (depth == 1) {
                body->key[body->pairs] = (uint8_t)levels[0].last_key;
                body->offset[body->pairs++] = (uint8_t)at;
            }
        }
        const struct pb_value value = read_value(bytes + at, size - at);
        if (value.type == PB_TYPE_NONE || (depth == 0 && value.type != PB_TYPE_MAP))
            return false;
        at += value.header_size;
        if (depth > 0)
            levels[depth - 1].left--;
        if (value.type == PB_TYPE_MAP || value.type == PB_TYPE_LIST) {
            if (depth == PB_BODY_DEPTH_MAX && !PB_VARIANT(depth_not_bounded))
                return false;
            levels[depth].left = value.size;
            levels[depth].is_map = value.type == PB_TYPE_MAP;
            levels[depth].last_key = -1;
            depth++;
        } else {
            at += value.size;
        }
        while (depth > 0 && levels[depth - 1].left == 0)
            depth--;
        if (depth == 0)
            return at == size || PB_VARIANT(trailing_bytes_taken) || (PB_VARIANT(claimed_size_trusted) && at > size);
    }
}

struct pb_value pb_body_value(const struct pb_body *body, uint8_t key, const uint8_t **contents)
{
    for (unsigned i = 0; i < body->pairs; i++) {
        if (body->key[i] != key)
            continue;
        const struct pb_value value = read_value(body->bytes + body->offset[i], body->size - (size_t)body->offset[i]);
        if (contents != NULL)
            *contents = body->bytes + body->offset[i] + value.header_size;
        return value;
    }
    return NOT_A_VALUE;
}

struct pb_value pb_body_item(const struct pb_body *body, const uint8_t **contents)
{
    const struct pb_value value = read_value(*contents, (size_t)(body->bytes + body->size - *contents));
    *contents += value.header_size;
    if (value.type == PB_TYPE_TEXT || value.type == PB_TYPE_BYTES)
        *contents += value.size;
    return value;
}

uint8_t pb_body_unknown_critical(const struct pb_body *body, const uint8_t *known, size_t known_count)
{
    for (unsigned i = 0; i < body->pairs; i++) {
        const uint8_t key = body->key[i];
        bool is_known = key < PB_BODY_CRITICAL_FIRST || key >= PB_BODY_PRIVATE_FIRST;
        for (size_t k = 0; k < known_count && !is_known; k++)
            is_known = known[k] == key;
        if (PB_VARIANT(unknown_key_refused) && key > 8 && key < PB_BODY_CRITICAL_FIRST)
            return key;
        if (!is_known && !PB_VARIANT(critical_key_ignored))
            return key;
    }
    return 0;
}
