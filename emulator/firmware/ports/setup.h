/* From options to a module that is powered up; for real and virtual time alike. */
#ifndef PB_SETUP_H
#define PB_SETUP_H

#include "module.h"
#include "options.h"
#include "storage.h"

/* Exits with an error where the options cannot be met. */
void setup_module(const struct options *options, struct pb_config *config, struct port_storage *storage,
                  struct pb_module *module, const struct pb_port *port, uint64_t time_us);

#endif
