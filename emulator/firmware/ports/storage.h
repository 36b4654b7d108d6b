/* Storage for the ports: a file, or memory that lives as long as the process. */
#ifndef PB_PORT_STORAGE_H
#define PB_PORT_STORAGE_H

#include <stdbool.h>
#include <stdint.h>

#include "port.h"

struct port_storage {
    int file; /* -1: memory */
    bool has_record[PB_STORAGE_SLOTS];
    uint8_t records[PB_STORAGE_SLOTS][PB_STORAGE_RECORD_SIZE];
};

/* `path` may be null. False: errno tells why the file cannot be used. */
bool port_storage_open(struct port_storage *storage, const char *path);
bool port_storage_read(struct port_storage *storage, unsigned slot, uint8_t *record);
bool port_storage_write(struct port_storage *storage, unsigned slot, const uint8_t *record);

#endif
