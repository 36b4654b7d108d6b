/* What the core needs from the outside. The callbacks are called from within pb_module_* functions only. */
#ifndef PB_PORT_H
#define PB_PORT_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

/* Two slots of this size, numbers 0 and 1, each written as a whole. */
#define PB_STORAGE_SLOTS 2
#define PB_STORAGE_RECORD_SIZE 82

struct pb_port {
    void *context;

    /* Takes one unit for the link: stuffed frames with delimiter on a stream, a bare frame on a datagram link. False:
     * no room now; the module keeps what it had to say and asks again after pb_module_link_ready(). */
    bool (*send)(void *context, const uint8_t *bytes, size_t size);

    /* Reads or writes one whole slot of PB_STORAGE_RECORD_SIZE bytes. False: it could not be done. */
    bool (*storage_read)(void *context, unsigned slot, uint8_t *record);
    bool (*storage_write)(void *context, unsigned slot, const uint8_t *record);
};

#endif
