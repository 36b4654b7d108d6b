#include "motion.h"

#include "bytes.h"
#include "ending.h"
#include "module.h"

void pb_motion_start(struct pb_module *module)
{
    pb_clear(&module->motion, sizeof module->motion);
}

bool pb_motion_has_place(const struct pb_module *module, bool is_scheduled)
{
    if (is_scheduled)
        return pb_slots_count(module, PB_SLOT_SCHEDULED) < module->config->scheduled;
    /* one runs or is about to; the queue is what waits behind it */
    const unsigned running = module->motion.running != NULL ? 1 : 0;
    if (PB_VARIANT(full_queue_accepts))
        return true;
    if (PB_VARIANT(queue_one_short))
        return pb_slots_count(module, PB_SLOT_QUEUED) + running < module->config->queue;
    return pb_slots_count(module, PB_SLOT_QUEUED) + running < module->config->queue + 1u;
}

void pb_motion_accept(struct pb_module *module, const struct pb_request *request, uint32_t receipt)
{
    struct pb_slot *slot = pb_slots_take(module);
    slot->state = PB_SLOT_QUEUED;
    slot->source = request->header.source;
    slot->session = request->header.session;
    slot->number = request->header.number;
    slot->motion = (uint8_t)pb_request_number(request, PB_KEY_MOVE_MOTION, 0);
    slot->magnitude = (int32_t)pb_request_number(request, PB_KEY_MOVE_MAGNITUDE, 0);
    slot->face = (uint8_t)pb_request_number(request, PB_KEY_MOVE_FACE, 0);
    slot->allow_last_bond = pb_request_number(request, PB_KEY_MOVE_ALLOW_LAST_BOND, 0) != 0;
    slot->receipt = receipt;
    if (PB_VARIANT(starts_counted_at_acceptance))
        module->truth.motion_starts++;
    if (pb_request_has(request, PB_KEY_MOVE_START_AT)) {
        const uint32_t start_at = (uint32_t)pb_request_number(request, PB_KEY_MOVE_START_AT, 0);
        slot->state = PB_SLOT_SCHEDULED;
        slot->start_us = module->now_us + (uint32_t)(start_at - pb_state_clock(module, module->now_us));
        if (PB_VARIANT(late_start_runs) && slot->start_us - module->now_us >= 0x80000000u)
            slot->start_us = module->now_us + 5000;
        if (PB_VARIANT(start_early))
            slot->start_us -= 15000;
        if (PB_VARIANT(start_at_overlooked))
            slot->state = PB_SLOT_QUEUED;
    }
}

struct pb_slot *pb_motion_find(struct pb_module *module, uint32_t source, uint32_t session, uint32_t number)
{
    for (unsigned i = 0; i < module->config->outcomes; i++) {
        struct pb_slot *slot = &module->slots.slots[i];
        const bool is_open = slot->state == PB_SLOT_QUEUED || slot->state == PB_SLOT_SCHEDULED ||
                             slot->state == PB_SLOT_RUNNING;
        if (is_open && !slot->ending && slot->source == source && slot->session == session && slot->number == number)
            return slot;
    }
    return PB_VARIANT(cancel_number_not_compared) ? module->motion.running : NULL;
}

bool pb_motion_is_last_bond(const struct pb_module *module, uint8_t motion, uint8_t face)
{
    if (PB_VARIANT(last_bond_opened))
        return false;
    return motion == PB_MOTION_UNBOND && module->plant.faces[face].bonded && pb_plant_bonds(&module->plant) == 1;
}

/* ------------------------------------------------------------------------------------------------ phases */

static const struct pb_motion_config *config_of(const struct pb_module *module, const struct pb_slot *slot)
{
    return pb_config_motion(module->config, slot->motion);
}

/* The motion goes through its phase until the plant has come to the phase's end. */
static void follow_phase(struct pb_module *module)
{
    const struct pb_motion_config *config = config_of(module, module->motion.running);
    const bool ends_at_no_return = module->motion.phase == PB_PHASE_RUNNING && config->no_return_ms > 0;
    const uint64_t end_us = 1000u * (uint64_t)(ends_at_no_return ? config->no_return_ms : config->typical_ms);
    const unsigned slowness = PB_VARIANT(motion_takes_too_long) ? 3 : 1;
    module->motion.next_us = module->now_us + slowness * end_us - pb_plant_progress_us(&module->plant, module->now_us);
}

static void enter_phase(struct pb_module *module, uint8_t phase)
{
    struct pb_motion *motion = &module->motion;
    motion->phase = phase;
    if (motion->hold_phase == phase) {
        motion->hold_phase = 0;
        motion->held = true;
        pb_plant_freeze(&module->plant, module->now_us);
    } else {
        follow_phase(module);
    }
}

/* How a motion that nothing stopped came out. */
static void conclude(struct pb_module *module, struct pb_slot *slot)
{
    slot->outcome = PB_OUTCOME_DONE;
    if (slot->motion == PB_MOTION_BOND) {
        const bool was_bonded = module->plant.faces[slot->face].bonded;
        if (!pb_plant_bond(&module->plant, slot->face) && !PB_VARIANT(bond_with_nothing_done)) {
            slot->outcome = PB_OUTCOME_FAILED;
            slot->cause = PB_CAUSE_NO_NEIGHBOUR;
        } else if (!was_bonded) {
            pb_truth_log(module, PB_TRUTH_EVENT_BOND_CLOSED);
        }
    } else if (slot->motion == PB_MOTION_UNBOND) {
        if (module->plant.faces[slot->face].bonded)
            pb_truth_log(module, PB_TRUTH_EVENT_BOND_OPENED);
        if (!PB_VARIANT(unbond_not_recorded))
            pb_plant_unbond(&module->plant, slot->face);
    } else {
        module->motion.position_known = true;
    }
    if (PB_VARIANT(position_known_by_bonding))
        module->motion.position_known = true;
}

static void reach_rest(struct pb_module *module)
{
    struct pb_motion *motion = &module->motion;
    struct pb_slot *slot = motion->running;
    int32_t displacement = pb_plant_displacement(&module->plant, module->now_us);
    if (PB_VARIANT(displacement_as_asked))
        displacement = slot->magnitude;
    const uint64_t duration_ms = (module->now_us - slot->start_us) / 1000u;
    if (!motion->stopping)
        conclude(module, slot);
    pb_plant_rest(&module->plant, module->now_us);
    pb_truth_log(module, PB_TRUTH_EVENT_AT_REST);
    motion->running = NULL;
    module->state.activity = PB_ACTIVITY_ENERGIZED;
    pb_slots_form(module, slot, displacement, duration_ms > UINT16_MAX ? UINT16_MAX : (uint16_t)duration_ms);
    const bool goes_on = PB_VARIANT(predecessor_forgotten) || PB_VARIANT(queue_runs_though_halted);
    if (slot->outcome != PB_OUTCOME_DONE && !goes_on)
        pb_ending_all_waiting(module, PB_SLOT_QUEUED, PB_CAUSE_PREDECESSOR);
    pb_ending_form(module);
    pb_state_settle_power(module);
}

static void end_phase(struct pb_module *module)
{
    struct pb_motion *motion = &module->motion;
    const bool has_no_return = config_of(module, motion->running)->no_return_ms > 0;
    if (motion->stopping || motion->phase == PB_PHASE_SETTLING) {
        reach_rest(module);
    } else if (motion->phase == PB_PHASE_RUNNING && has_no_return) {
        motion->committed = true;
        enter_phase(module, PB_PHASE_COMMITTED);
    } else {
        enter_phase(module, PB_PHASE_SETTLING);
    }
}

/* ------------------------------------------------------------------------------------------------ begin */

static bool may_begin(const struct pb_module *module)
{
    if (PB_VARIANT(queue_runs_though_halted))
        return module->state.activity == PB_ACTIVITY_ENERGIZED;
    return module->state.activity == PB_ACTIVITY_ENERGIZED && !module->state.halt_latch &&
           !module->state.fault_latch && module->lease.held;
}

static void fail_waiting(struct pb_module *module, struct pb_slot *slot, uint8_t cause)
{
    slot->outcome = PB_OUTCOME_FAILED;
    slot->cause = cause;
    pb_slots_form(module, slot, 0, 0);
}

/* Phase ready is over: the motion starts. Bonds may have opened since the request was judged. */
static void begin(struct pb_module *module, struct pb_slot *slot)
{
    struct pb_motion *motion = &module->motion;
    const bool is_last_bond = pb_motion_is_last_bond(module, slot->motion, slot->face);
    if (!slot->allow_last_bond && is_last_bond && !PB_VARIANT(last_bond_judged_once)) {
        const bool was_queued = slot->state == PB_SLOT_QUEUED;
        fail_waiting(module, slot, PB_CAUSE_LAST_BOND);
        if (was_queued)
            pb_ending_all_waiting(module, PB_SLOT_QUEUED, PB_CAUSE_PREDECESSOR);
        pb_ending_form(module);
        return;
    }
    const bool is_hit = PB_VARIANT(cancel_hits_the_next) && motion->stopping && motion->running == NULL;
    slot->state = PB_SLOT_RUNNING;
    slot->held = false;
    slot->start_us = module->now_us;
    motion->running = slot;
    motion->stopping = false;
    motion->committed = false;
    motion->held = false;
    module->state.activity = PB_ACTIVITY_MOVING;
    pb_plant_begin(&module->plant, module->now_us, config_of(module, slot), slot->magnitude);
    pb_truth_log(module, PB_TRUTH_EVENT_MOTION_START);
    enter_phase(module, PB_PHASE_RUNNING);
    if (is_hit)
        pb_ending_cancel(module, slot);
}

/* Phase ready: held there if that was asked for. A scheduled motion that is held becomes the first of the queue. */
static void get_ready(struct pb_module *module, struct pb_slot *slot)
{
    if (module->motion.hold_phase != PB_PHASE_READY) {
        begin(module, slot);
        return;
    }
    const struct pb_slot *head = pb_slots_first(module, PB_SLOT_QUEUED, false);
    if (slot->state == PB_SLOT_SCHEDULED && head != NULL)
        slot->order = head->order - 1u;
    module->motion.hold_phase = 0;
    slot->state = PB_SLOT_QUEUED;
    slot->held = true;
}

/* The stated start has come: now or not at all. */
static void begin_scheduled(struct pb_module *module, struct pb_slot *slot)
{
    if (PB_VARIANT(late_start_waits) && module->motion.running != NULL)
        slot->state = PB_SLOT_QUEUED;
    else if (module->motion.running != NULL || !pb_answers_have_left(module, slot->receipt))
        fail_waiting(module, slot, PB_CAUSE_LATE);
    else
        get_ready(module, slot);
}

static struct pb_slot *ready_to_begin(struct pb_module *module)
{
    struct pb_slot *head = may_begin(module) ? pb_slots_first(module, PB_SLOT_QUEUED, false) : NULL;
    if (head == NULL || head->held)
        return NULL;
    if (!pb_answers_have_left(module, head->receipt) && !PB_VARIANT(motion_before_receipt))
        return NULL;
    if (PB_VARIANT(begins_late) && module->now_us % 200000u != 0)
        return NULL;
    return head;
}

static struct pb_slot *next_scheduled(struct pb_module *module)
{
    struct pb_slot *next = NULL;
    for (unsigned i = 0; i < module->config->outcomes; i++) {
        struct pb_slot *slot = &module->slots.slots[i];
        if (slot->state == PB_SLOT_SCHEDULED && !slot->ending && (next == NULL || slot->start_us < next->start_us))
            next = slot;
    }
    return next;
}

/* ------------------------------------------------------------------------------------------------ time */

uint64_t pb_motion_next_due(struct pb_module *module)
{
    uint64_t due_us = PB_NEVER;
    if (module->motion.running != NULL && !module->motion.held)
        due_us = module->motion.next_us;
    const struct pb_slot *scheduled = next_scheduled(module);
    if (scheduled != NULL)
        due_us = pb_earlier(due_us, scheduled->start_us);
    if (ready_to_begin(module) != NULL)
        due_us = pb_earlier(due_us, module->now_us);
    if (PB_VARIANT(begins_late))
        due_us = pb_earlier(due_us, (module->now_us / 200000u + 1u) * 200000u);
    return due_us;
}

bool pb_motion_step(struct pb_module *module)
{
    if (module->motion.running != NULL && !module->motion.held && module->motion.next_us <= module->now_us) {
        end_phase(module);
        return true;
    }
    /* a stated start cannot wait, a queued one can */
    struct pb_slot *slot = next_scheduled(module);
    if (slot != NULL && slot->start_us <= module->now_us) {
        begin_scheduled(module, slot);
        return true;
    }
    slot = ready_to_begin(module);
    if (slot != NULL)
        get_ready(module, slot);
    return slot != NULL;
}

void pb_motion_hold(struct pb_module *module, uint8_t phase)
{
    module->motion.hold_phase = PB_VARIANT(hold_ignored) ? 0 : phase;
}

/* Lets go what is held; with nothing held, the next motion is not held either. */
void pb_motion_release(struct pb_module *module)
{
    struct pb_motion *motion = &module->motion;
    bool was_held = motion->held;
    if (motion->held) {
        motion->held = false;
        pb_plant_resume(&module->plant, module->now_us);
        follow_phase(module);
    }
    for (unsigned i = 0; i < module->config->outcomes; i++) {
        was_held = was_held || module->slots.slots[i].held;
        module->slots.slots[i].held = false;
    }
    if (!was_held)
        motion->hold_phase = 0;
}
