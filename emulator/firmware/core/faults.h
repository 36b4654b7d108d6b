/* The fault list: conditions, occurrences, what is latched, what was told. */
#ifndef PB_FAULTS_H
#define PB_FAULTS_H

#include <stdbool.h>
#include <stdint.h>

#include "frame.h"
#include "sizes.h"

struct pb_module;

/* A notice is sent once and, by clause FLT-17, repeated at most four times. */
#define PB_NOTICE_SENDINGS 5

#define PB_FAULT_CODES 16 /* codes of the table are below this */

struct pb_fault {
    bool used;
    bool latched;
    bool told;
    bool unstamped; /* `change` is still to be filled in */
    uint8_t code;
    uint8_t sendings;
    uint32_t occurrence;
    uint32_t count;
    uint32_t clock_us;
    int32_t value;
    uint32_t event;
    uint32_t change;
    uint32_t interval_ms; /* from the next sending to the one after */
    uint64_t next_send_us;
};

/* The latest rising edge of a code. */
struct pb_edge {
    uint32_t count;
    uint32_t clock_us;
    int32_t value;
};

struct pb_faults {
    uint16_t standing;   /* bit for each code: its condition stands */
    uint16_t unrecorded; /* bit for each code: an edge found no place */
    uint32_t occurrences;
    uint16_t lost;
    uint64_t last_sent_us;
    bool any_sent;
    struct pb_edge edges[PB_FAULT_CODES];
    struct pb_fault list[PB_MAX_FAULTS + 1]; /* the place behind the declared ones is list-overflow's */
};

/* At power-up; `surviving`: conditions that outlasted the restart. */
void pb_faults_start(struct pb_module *module, uint16_t surviving);

bool pb_fault_is_known(int64_t code);
bool pb_fault_is_latching(uint8_t code);
uint8_t pb_fault_class(uint8_t code);

/* A condition begins; without effect while it stands. */
void pb_faults_raise(struct pb_module *module, uint8_t code);
void pb_faults_withdraw(struct pb_module *module, uint8_t code);

/* Something that happened and does not stand. */
void pb_faults_happen(struct pb_module *module, uint8_t code);

bool pb_faults_is_standing(const struct pb_module *module, uint8_t code);

/* The latched occurrence of this number, or null. */
struct pb_fault *pb_faults_latched(struct pb_module *module, int64_t occurrence);
bool pb_faults_has_latched_code(const struct pb_module *module, uint8_t code);
unsigned pb_faults_latched_count(const struct pb_module *module);

/* Clears what was marked by latched = false: records what waited for a place, opens the latch if none is left. */
void pb_faults_after_clear(struct pb_module *module);

/* Something may have become free in the list: records what found no place before. */
void pb_faults_record_waiting(struct pb_module *module);

/* A grant of the lease: every latched occurrence is told afresh. */
void pb_faults_announce(struct pb_module *module);

/* True: the confirm named a fault event that was not yet told. */
bool pb_faults_confirm(struct pb_module *module, const struct pb_header *header, uint32_t event);

unsigned pb_faults_held(const struct pb_module *module);
const struct pb_fault *pb_faults_entry(const struct pb_module *module, unsigned age);

void pb_faults_stamp(struct pb_module *module, uint32_t change);

/* Sending. */
uint64_t pb_faults_next_due(const struct pb_module *module);
void pb_faults_send_due(struct pb_module *module);

#endif
