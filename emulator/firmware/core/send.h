/* One frame on its way out: header, body, check sequence, stuffing. */
#ifndef PB_SEND_H
#define PB_SEND_H

#include <stdbool.h>

#include "frame.h"
#include "writer.h"

struct pb_module;

struct pb_outgoing {
    struct pb_header header;
    uint8_t frame[PB_FRAME_SIZE_MAX];
    struct pb_writer body;
};

void pb_outgoing_begin(struct pb_outgoing *outgoing, uint8_t kind, uint32_t source);
void pb_outgoing_to(struct pb_outgoing *outgoing, uint32_t destination, uint32_t session, uint32_t number);

/* False: the link has no room now. */
bool pb_outgoing_send(struct pb_module *module, struct pb_outgoing *outgoing);

#endif
