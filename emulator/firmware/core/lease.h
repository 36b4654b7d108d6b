/* The right to command. */
#ifndef PB_LEASE_H
#define PB_LEASE_H

#include <stdbool.h>
#include <stdint.h>

struct pb_module;

struct pb_lease {
    bool held;
    uint32_t source; /* 0 while nobody holds it, as is session */
    uint32_t session;
    uint32_t number; /* of the last grant */
    uint32_t duration_ms;
    uint64_t end_us;
};

void pb_lease_start(struct pb_module *module);
bool pb_lease_is_holder(const struct pb_module *module, uint32_t source, uint32_t session);
void pb_lease_grant(struct pb_module *module, uint32_t source, uint32_t session, uint32_t duration_ms);
void pb_lease_extend(struct pb_module *module);
uint32_t pb_lease_remaining_ms(const struct pb_module *module);

/* Expiry and release alike. */
void pb_lease_end(struct pb_module *module);

#endif
