/* The command handler of one robot module. No clock, no link and no memory of its own: time, bytes and storage come
 * in, frames and the next deadline go out. Several modules may live in one process; none may be copied or moved. */
#ifndef PB_MODULE_H
#define PB_MODULE_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "answers.h"
#include "assist.h"
#include "config.h"
#include "encode.h"
#include "ending.h"
#include "faults.h"
#include "history.h"
#include "lease.h"
#include "motion.h"
#include "plant.h"
#include "port.h"
#include "random.h"
#include "slots.h"
#include "state.h"
#include "storage.h"
#include "stream.h"
#include "telemetry.h"
#include "truth.h"
#include "variant.h"

#define PB_NEVER UINT64_MAX
#define PB_DROP_REASONS 12 /* numbered from 1 */

struct pb_module {
    const struct pb_config *config;
    struct pb_port port;

    /* outlast a restart */
    struct pb_random random;
    struct pb_storage storage;
    struct pb_plant plant;
    uint16_t surviving; /* bit for each fault code: its condition outlasts a restart */
    bool link_blocked;
    bool any_sent;
    uint64_t last_sent_us;

    /* begin anew with each start */
    uint64_t now_us;  /* instant of the input that is being taken */
    uint64_t wall_us; /* latest time told by the caller; above now_us only while late */
    uint32_t epoch;
    bool epoch_unsaved;
    uint32_t address;
    uint32_t event_number; /* last given */
    uint16_t drops[PB_DROP_REASONS];
    uint16_t silent_refusals;
    struct pb_stream stream;
    struct pb_state state;
    struct pb_lease lease;
    struct pb_history history;
    struct pb_motion motion;
    struct pb_slots slots;
    struct pb_faults faults;
    struct pb_telemetry telemetry;
    struct pb_assist assist;
    struct pb_truth truth;
    struct pb_answers answers;
};

/* ------------------------------------------------------------------------------------------------ for callers */

/* Power-up at time_us. `config` must outlive the module. Returns null, or what is wrong with the configuration. */
const char *pb_module_init(struct pb_module *module, const struct pb_config *config, const struct pb_port *port,
                           uint64_t seed, uint64_t time_us, uint8_t restart_cause);

/* Bytes of a stream link that arrived at time_us. Times never go back; what is due before is done first. */
void pb_module_feed(struct pb_module *module, uint64_t time_us, const uint8_t *bytes, size_t size);

/* One unit of a datagram link. */
void pb_module_datagram(struct pb_module *module, uint64_t time_us, const uint8_t *bytes, size_t size);

/* Does all that is due at or before time_us. */
void pb_module_advance(struct pb_module *module, uint64_t time_us);

/* When the module wants to be advanced next; PB_NEVER for never. */
uint64_t pb_module_deadline(struct pb_module *module);

/* The link takes frames again after send() had returned false. */
void pb_module_link_ready(struct pb_module *module);

/* The peer is gone in the middle of a frame, perhaps; what comes next begins a new block. */
void pb_module_link_lost(struct pb_module *module);

/* A stop button on the module. */
void pb_module_halt(struct pb_module *module, uint64_t time_us);

/* A sensor's condition of the fault table begins or ends. False: no such code. */
bool pb_module_raise(struct pb_module *module, uint64_t time_us, uint8_t code);
bool pb_module_withdraw(struct pb_module *module, uint64_t time_us, uint8_t code);

/* ------------------------------------------------------------------------------------------------ for the core */

static inline uint64_t pb_earlier(uint64_t a, uint64_t b)
{
    return a < b ? a : b;
}

/* A start, cause of the contract. Not complete before the epoch is committed, as far as storage allows it. */
void pb_module_start(struct pb_module *module, uint8_t restart_cause);

/* Does what is due before limit_us, and at it too if so asked. */
void pb_schedule_run(struct pb_module *module, uint64_t limit_us, bool including);
uint64_t pb_schedule_next_due(struct pb_module *module);
void pb_schedule_send(struct pb_module *module);

/* After each input. */
void pb_module_after_input(struct pb_module *module);

/* A bare frame that has arrived at now_us. */
void pb_intake_frame(struct pb_module *module, const uint8_t *frame, size_t size);
void pb_intake_drop(struct pb_module *module, uint8_t reason);

#endif
