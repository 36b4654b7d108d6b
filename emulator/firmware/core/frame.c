#include "frame.h"

#include "bytes.h"
#include "crc.h"
#include "variant.h"

static bool check_matches(const uint8_t *frame, size_t covered)
{
    const uint32_t told = (uint32_t)pb_get(frame + covered, PB_CHECK_SIZE);
    if (PB_VARIANT(crc_leaves_out_version)) {
        const uint8_t version = PB_VERSION;
        return told == pb_crc_end(pb_crc_add(pb_crc_add(pb_crc_begin(), &version, 1), frame + 1, covered - 1));
    }
    if (PB_VARIANT(crc_compared_in_16_bits))
        return (uint16_t)told == (uint16_t)pb_crc(frame, covered);
    if (PB_VARIANT(crc_zero_means_none) && told == 0)
        return true;
    return told == pb_crc(frame, covered);
}

uint8_t pb_frame_read(const uint8_t *frame, size_t size, struct pb_header *header)
{
    if (size < PB_FRAME_SIZE_MIN && !PB_VARIANT(short_frame_underflows))
        return PB_DROP_TOO_SHORT;
    const size_t covered = size - PB_CHECK_SIZE;
    if (!check_matches(frame, covered))
        return PB_DROP_CRC;
    header->version = frame[PB_OFFSET_VERSION];
    header->kind = frame[PB_OFFSET_KIND];
    header->flags = frame[PB_OFFSET_FLAGS];
    header->body_length = frame[PB_OFFSET_BODY_LENGTH];
    header->source = (uint32_t)pb_get(frame + PB_OFFSET_SOURCE, 4);
    header->destination = (uint32_t)pb_get(frame + PB_OFFSET_DESTINATION, 4);
    header->session = (uint32_t)pb_get(frame + PB_OFFSET_SESSION, 4);
    header->number = (uint32_t)pb_get(frame + PB_OFFSET_NUMBER, 4);
    return 0;
}

enum pb_kind_range pb_frame_range(uint8_t kind)
{
    if (kind >= PB_RANGE_READ_FIRST && kind <= PB_RANGE_READ_LAST)
        return PB_RANGE_IS_READ;
    if (kind >= PB_RANGE_COMMAND_FIRST && kind <= PB_RANGE_COMMAND_PRIVATE_LAST)
        return PB_RANGE_IS_COMMAND;
    if (kind >= PB_RANGE_NOTICE_FIRST && kind <= PB_RANGE_NOTICE_LAST)
        return PB_RANGE_IS_NOTICE;
    return PB_RANGE_IS_OTHER;
}

bool pb_address_is_unicast(uint32_t address)
{
    if (PB_VARIANT(high_addresses_unanswered) && address >= 0x80000000u)
        return false;
    return address >= PB_ADDRESS_UNICAST_FIRST && address <= PB_ADDRESS_UNICAST_LAST;
}

bool pb_address_is_group(uint32_t address)
{
    return address >= PB_ADDRESS_GROUP_FIRST && address <= PB_ADDRESS_GROUP_LAST;
}

size_t pb_frame_finish(uint8_t *frame, const struct pb_header *header, size_t body_size)
{
    const size_t covered = PB_HEADER_SIZE + body_size;
    frame[PB_OFFSET_VERSION] = PB_VERSION;
    frame[PB_OFFSET_KIND] = header->kind;
    frame[PB_OFFSET_FLAGS] = 0;
    frame[PB_OFFSET_BODY_LENGTH] = (uint8_t)body_size;
    pb_put(frame + PB_OFFSET_SOURCE, 4, header->source);
    pb_put(frame + PB_OFFSET_DESTINATION, 4, header->destination);
    pb_put(frame + PB_OFFSET_SESSION, 4, header->session);
    pb_put(frame + PB_OFFSET_NUMBER, 4, header->number);
    pb_put(frame + covered, PB_CHECK_SIZE, pb_crc(frame, covered));
    return covered + PB_CHECK_SIZE;
}
