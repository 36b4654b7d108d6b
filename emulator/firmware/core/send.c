#include "send.h"

#include "cobs.h"
#include "module.h"

/* A sender that was silent for longer than this begins with a delimiter. */
static const uint64_t SILENCE_US = 1000u * PB_LIMIT_HALF_FRAME_BRIDGE;

void pb_outgoing_begin(struct pb_outgoing *outgoing, uint8_t kind, uint32_t source)
{
    const struct pb_header header = {PB_VERSION, kind, 0, 0, source, 0, 0, 0};
    outgoing->header = header;
    pb_write_begin(&outgoing->body, outgoing->frame + PB_HEADER_SIZE, PB_BODY_SIZE_MAX);
}

void pb_outgoing_to(struct pb_outgoing *outgoing, uint32_t destination, uint32_t session, uint32_t number)
{
    outgoing->header.destination = destination;
    outgoing->header.session = session;
    outgoing->header.number = number;
}

static size_t make_stream_unit(const struct pb_module *module, const uint8_t *frame, size_t size, uint8_t *unit)
{
    size_t at = 0;
    if (!module->any_sent || module->now_us - module->last_sent_us > SILENCE_US)
        unit[at++] = PB_DELIMITER;
    at += pb_cobs_encode(frame, size, unit + at);
    unit[at++] = PB_DELIMITER;
    return at;
}

bool pb_outgoing_send(struct pb_module *module, struct pb_outgoing *outgoing)
{
    uint8_t unit[PB_STUFFED_SIZE_MAX + 2];
    if (module->link_blocked)
        return false;
    if (outgoing->body.overflow)
        return true; /* no body of the contract is so long; better silent than cut */
    const size_t size = pb_frame_finish(outgoing->frame, &outgoing->header, outgoing->body.size);
    bool is_taken;
    if (module->config->link == PB_LINK_DATAGRAM)
        is_taken = module->port.send(module->port.context, outgoing->frame, size);
    else
        is_taken = module->port.send(module->port.context, unit, make_stream_unit(module, outgoing->frame, size, unit));
    module->link_blocked = !is_taken;
    if (is_taken) {
        module->any_sent = true;
        module->last_sent_us = module->now_us;
    }
    return is_taken;
}
