#include "setup.h"

#include <errno.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

void setup_module(const struct options *options, struct pb_config *config, struct port_storage *storage,
                  struct pb_module *module, const struct pb_port *port, uint64_t time_us)
{
    options_configure(options, config);
    if (!port_storage_open(storage, options->storage_path)) {
        fprintf(stderr, "%s: --storage %s: %s\n", options->program, options->storage_path, strerror(errno));
        exit(2);
    }
    const char *problem =
        pb_module_init(module, config, port, options->seed, time_us, PB_RESTART_CAUSE_POWER_ON);
    if (problem != NULL) {
        fprintf(stderr, "%s: configuration: %s\n", options->program, problem);
        exit(2);
    }
}
