#include "slots.h"

#include "bytes.h"
#include "module.h"

static const uint64_t REPEAT_FIRST_US = 1000u * PB_LIMIT_OUTCOME_REPEAT_FIRST;
static const uint64_t RESEND_SPACING_US = 1000u * PB_LIMIT_OUTCOME_RESEND_SPACING;

/* What two of the broken variants carry over a restart. */
static void keep_outcomes(struct pb_module *module)
{
    for (unsigned i = 0; i < module->config->outcomes; i++) {
        struct pb_slot *slot = &module->slots.slots[i];
        slot->receipt = 0;
        slot->next_send_us = module->now_us;
        if (slot->state != PB_SLOT_FORMED && slot->state != PB_SLOT_FREE) {
            slot->outcome = PB_OUTCOME_LOST;
            pb_slots_form(module, slot, 0, 0);
        }
        if (PB_VARIANT(lost_outcomes_sent) != (slot->outcome == PB_OUTCOME_LOST))
            slot->state = PB_SLOT_FREE;
    }
}

void pb_slots_start(struct pb_module *module)
{
    if (PB_VARIANT(outcomes_survive_restart) || PB_VARIANT(lost_outcomes_sent))
        keep_outcomes(module);
    else
        pb_clear(&module->slots, sizeof module->slots);
}

static bool is_before(const struct pb_slot *a, const struct pb_slot *b)
{
    return (int32_t)(a->order - b->order) < 0;
}

/* A free place, else the confirmed outcome formed first. */
static struct pb_slot *free_place(struct pb_module *module)
{
    struct pb_slot *oldest = NULL;
    for (unsigned i = 0; i < module->config->outcomes; i++) {
        struct pb_slot *slot = &module->slots.slots[i];
        if (slot->state == PB_SLOT_FREE)
            return slot;
        if (PB_VARIANT(outcomes_overwritten) && slot->state == PB_SLOT_FORMED)
            return slot;
        if (slot->state == PB_SLOT_CONFIRMED && (oldest == NULL || is_before(slot, oldest)))
            oldest = slot;
    }
    return oldest;
}

bool pb_slots_has_room(const struct pb_module *module)
{
    if (PB_VARIANT(outcomes_overwritten))
        return true;
    return pb_slots_count(module, PB_SLOT_FREE) + pb_slots_count(module, PB_SLOT_CONFIRMED) > 0;
}

struct pb_slot *pb_slots_take(struct pb_module *module)
{
    struct pb_slot *slot = free_place(module);
    pb_clear(slot, sizeof *slot);
    slot->order = ++module->slots.orders;
    return slot;
}

struct pb_slot *pb_slots_first(struct pb_module *module, enum pb_slot_state state, bool ending)
{
    struct pb_slot *first = NULL;
    for (unsigned i = 0; i < module->config->outcomes; i++) {
        struct pb_slot *slot = &module->slots.slots[i];
        const bool goes_first = first == NULL || is_before(slot, first) != PB_VARIANT(queue_last_first);
        if (slot->state == state && slot->ending == ending && goes_first)
            first = slot;
    }
    return first;
}

unsigned pb_slots_count(const struct pb_module *module, enum pb_slot_state state)
{
    unsigned count = 0;
    for (unsigned i = 0; i < module->config->outcomes; i++)
        if (module->slots.slots[i].state == state && !module->slots.slots[i].ending)
            count++;
    return count;
}

void pb_slots_form(struct pb_module *module, struct pb_slot *slot, int32_t displacement, uint16_t duration_ms)
{
    slot->state = PB_SLOT_FORMED;
    slot->ending = false;
    slot->held = false;
    slot->magnitude = displacement;
    slot->duration_ms = duration_ms;
    slot->order = ++module->slots.orders;
    slot->event = ++module->event_number;
    slot->unstamped = true;
    slot->sendings = 0;
    slot->next_send_us = module->now_us + (PB_VARIANT(outcome_sent_late) ? 80000 : 0);
}

static bool is_formed(const struct pb_slot *slot)
{
    return slot->state == PB_SLOT_FORMED || slot->state == PB_SLOT_CONFIRMED;
}

unsigned pb_slots_formed(const struct pb_module *module)
{
    return pb_slots_count(module, PB_SLOT_FORMED) + pb_slots_count(module, PB_SLOT_CONFIRMED);
}

/* How many formed outcomes are newer than this one. */
static unsigned age_of(const struct pb_module *module, const struct pb_slot *slot)
{
    unsigned newer = 0;
    for (unsigned i = 0; i < module->config->outcomes; i++)
        if (is_formed(&module->slots.slots[i]) && is_before(slot, &module->slots.slots[i]))
            newer++;
    return newer;
}

const struct pb_slot *pb_slots_entry(const struct pb_module *module, unsigned age)
{
    for (unsigned i = 0; i < module->config->outcomes; i++) {
        const struct pb_slot *slot = &module->slots.slots[i];
        const unsigned wanted = PB_VARIANT(records_oldest_first) ? pb_slots_formed(module) - 1u - age : age;
        if (is_formed(slot) && age_of(module, slot) == wanted)
            return slot;
    }
    return NULL;
}

bool pb_slots_confirm(struct pb_module *module, const struct pb_header *header, uint32_t event)
{
    for (unsigned i = 0; i < module->config->outcomes; i++) {
        struct pb_slot *slot = &module->slots.slots[i];
        if (slot->state != PB_SLOT_FORMED || slot->event != event)
            continue;
        const bool is_requester = slot->source == header->source && slot->session == header->session;
        const bool is_holder = pb_lease_is_holder(module, header->source, header->session);
        if (PB_VARIANT(holder_cannot_confirm) ? !is_requester : !is_requester && !is_holder)
            if (!PB_VARIANT(anyone_confirms))
                return false;
        if (PB_VARIANT(confirm_does_not_end_repeats))
            return true;
        slot->state = PB_VARIANT(confirmed_record_gone) ? PB_SLOT_FREE : PB_SLOT_CONFIRMED;
        return true;
    }
    return false;
}

void pb_slots_ask_resend(struct pb_module *module, const struct pb_header *header, uint32_t receipt)
{
    for (unsigned i = 0; i < module->config->outcomes; i++) {
        struct pb_slot *slot = &module->slots.slots[i];
        const bool is_named = slot->number == header->number || PB_VARIANT(copy_brings_all_outcomes);
        if (slot->state == PB_SLOT_FORMED && slot->source == header->source && slot->session == header->session &&
            is_named) {
            slot->resend = true;
            slot->resend_after = receipt;
        }
    }
}

void pb_slots_stamp(struct pb_module *module, uint32_t change)
{
    for (unsigned i = 0; i < module->config->outcomes; i++) {
        struct pb_slot *slot = &module->slots.slots[i];
        if (slot->unstamped)
            slot->change = change;
        slot->unstamped = false;
    }
}

static bool resend_is_due(const struct pb_module *module, const struct pb_slot *slot)
{
    return slot->resend && pb_answers_have_left(module, slot->resend_after);
}

/* When an unconfirmed outcome goes out next; never before the receipt of its own request. */
static uint64_t next_due(const struct pb_module *module, const struct pb_slot *slot)
{
    if (slot->state != PB_SLOT_FORMED || !pb_answers_have_left(module, slot->receipt))
        return PB_NEVER;
    if (resend_is_due(module, slot))
        return module->now_us;
    if (PB_VARIANT(outcome_told_once))
        return slot->sendings == 0 ? slot->next_send_us : PB_NEVER;
    return slot->sendings <= PB_LIMIT_OUTCOME_REPEATS ? slot->next_send_us : PB_NEVER;
}

uint64_t pb_slots_next_due(const struct pb_module *module)
{
    uint64_t due_us = PB_NEVER;
    for (unsigned i = 0; i < module->config->outcomes; i++)
        due_us = pb_earlier(due_us, next_due(module, &module->slots.slots[i]));
    return due_us;
}

/* Its turn: by the repeat timer, or because of a copied request and then not too soon after the last. */
static void send_one(struct pb_module *module, struct pb_slot *slot)
{
    const bool is_repeat = slot->sendings <= PB_LIMIT_OUTCOME_REPEATS && slot->next_send_us <= module->now_us;
    const bool is_spaced = slot->sendings == 0 || module->now_us - slot->last_sent_us >= RESEND_SPACING_US ||
                           PB_VARIANT(copies_bring_outcomes_unspaced);
    if ((is_repeat || is_spaced) && !pb_encode_outcome(module, slot))
        return;
    if (is_repeat || is_spaced)
        slot->last_sent_us = module->now_us;
    if (is_repeat) {
        slot->next_send_us = module->now_us + (REPEAT_FIRST_US << slot->sendings);
        slot->sendings++;
    }
    if (PB_VARIANT(copy_moves_outcome_repeats) && resend_is_due(module, slot) && slot->sendings > 0)
        slot->next_send_us = module->now_us + (REPEAT_FIRST_US << (slot->sendings - 1));
    if (resend_is_due(module, slot))
        slot->resend = false;
}

void pb_slots_send_due(struct pb_module *module)
{
    while (!module->link_blocked) {
        struct pb_slot *first = NULL;
        for (unsigned i = 0; i < module->config->outcomes; i++) {
            struct pb_slot *slot = &module->slots.slots[i];
            if (next_due(module, slot) <= module->now_us && (first == NULL || is_before(slot, first)))
                first = slot;
        }
        if (first == NULL)
            return;
        send_one(module, first);
    }
}
