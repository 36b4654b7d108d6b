/* Command-line options of the ports. */
#ifndef PB_OPTIONS_H
#define PB_OPTIONS_H

#include <stdbool.h>
#include <stdint.h>

#include "config.h"

struct options {
    const char *program;
    uint32_t address;
    bool has_hardware_id;
    uint8_t hardware_id[PB_HARDWARE_ID_SIZE];
    uint64_t seed;
    const char *storage_path; /* null: kept for the life of the process only */
    bool verbose;
    const char *bind_address; /* module-tcp only, as is port */
    uint16_t port;
};

/* Reads the arguments. Prints help and exits 0, or an error and exits 2, where that is due. `takes_port`: --port and
 * --bind are options of this program. */
void options_read(struct options *options, int argc, char **argv, const char *purpose, bool takes_port);

/* The configuration these options ask for. */
void options_configure(const struct options *options, struct pb_config *config);

#endif
