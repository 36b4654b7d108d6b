/* What is kept through power loss: epoch, address, groups. Two records with a check value each; the newer sound one
 * counts, so a write is made whole or not at all. */
#ifndef PB_STORAGE_H
#define PB_STORAGE_H

#include <stdbool.h>
#include <stdint.h>

#include "sizes.h"

struct pb_module;

struct pb_settings {
    uint32_t epoch;
    uint32_t address; /* as assigned; 0: never assigned, the configured one counts */
    uint8_t group_count;
    uint32_t groups[PB_MAX_GROUPS]; /* ascending */
};

struct pb_storage {
    struct pb_settings kept;
    uint32_t serial;      /* of the newest record */
    uint8_t newest_slot;
    bool has_record;
    uint8_t cut_at;       /* power fails during this write from now; 0: never */
    bool power_failed;    /* it just did: the module must start again */
};

/* At power-up: finds the newest sound record. */
void pb_storage_load(struct pb_module *module);

/* Commits new settings. False: they could not be kept, the old ones stand. */
bool pb_storage_commit(struct pb_module *module, const struct pb_settings *settings);

#endif
