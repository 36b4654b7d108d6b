#include "faults.h"

#include "bytes.h"
#include "module.h"

struct fault_kind {
    uint8_t code;
    uint8_t fault_class;
    bool is_latching;
};

#define FAULT_ROW(NAME, code, class, severity) {code, class, (severity) == PB_SEVERITY_LATCHING},
static const struct fault_kind FAULT_KINDS[] = {PB_FAULT_TABLE(FAULT_ROW)};

static const struct fault_kind *kind_of(int64_t code)
{
    for (size_t i = 0; i < sizeof FAULT_KINDS / sizeof FAULT_KINDS[0]; i++)
        if (FAULT_KINDS[i].code == code)
            return &FAULT_KINDS[i];
    return NULL;
}

bool pb_fault_is_known(int64_t code)
{
    return code < PB_FAULT_CODES && kind_of(code) != NULL;
}

bool pb_fault_is_latching(uint8_t code)
{
    if (PB_VARIANT(notice_latches) && code == PB_FAULT_SHELL_WARM)
        return true;
    return kind_of(code)->is_latching;
}

uint8_t pb_fault_class(uint8_t code)
{
    return kind_of(code)->fault_class;
}

static uint16_t bit(uint8_t code)
{
    return (uint16_t)(1u << code);
}

bool pb_faults_is_standing(const struct pb_module *module, uint8_t code)
{
    return (module->faults.standing & bit(code)) != 0;
}

/* What the simple plant measures at such a moment. */
static int32_t measured(const struct pb_module *module, uint8_t code)
{
    switch (code) {
    case PB_FAULT_ACTUATOR_STALL:
    case PB_FAULT_POSITION_LOST:
        return pb_plant_position(&module->plant, module->now_us);
    case PB_FAULT_OVER_CURRENT:
        return 3150;
    case PB_FAULT_SUPPLY_LOW:
        return module->config->supply_mv;
    case PB_FAULT_WINDING_HOT:
        return module->config->temperatures[0];
    case PB_FAULT_SHELL_WARM: /* the last sensor, if there is any */
        return module->config->temperature_count == 0
                   ? 0
                   : module->config->temperatures[module->config->temperature_count - 1];
    case PB_FAULT_LIST_OVERFLOW:
        return 1;
    default:
        return 0;
    }
}

/* ------------------------------------------------------------------------------------------------ places */

/* Whether an occurrence may not be forgotten yet. */
static bool must_stay(const struct pb_module *module, const struct pb_fault *fault)
{
    if (!fault->used)
        return false;
    if (PB_VARIANT(overflow_overwrites))
        return false;
    if (pb_fault_is_latching(fault->code))
        return fault->latched;
    if (pb_faults_is_standing(module, fault->code))
        return true;
    return !fault->told && fault->sendings < PB_NOTICE_SENDINGS;
}

static struct pb_fault *find_place(struct pb_module *module, uint8_t code)
{
    struct pb_fault *list = module->faults.list;
    struct pb_fault *oldest = NULL;
    if (code == PB_FAULT_LIST_OVERFLOW)
        return must_stay(module, &list[module->config->faults]) ? NULL : &list[module->config->faults];
    for (unsigned i = 0; i < module->config->faults; i++) {
        if (!list[i].used)
            return &list[i];
        if (!must_stay(module, &list[i]) && (oldest == NULL || list[i].occurrence < oldest->occurrence))
            oldest = &list[i];
    }
    return oldest;
}

static void record(struct pb_module *module, struct pb_fault *fault, uint8_t code)
{
    const struct pb_edge *edge = &module->faults.edges[code];
    pb_clear(fault, sizeof *fault);
    fault->used = true;
    fault->latched = pb_fault_is_latching(code);
    fault->unstamped = true;
    fault->code = code;
    fault->occurrence = ++module->faults.occurrences;
    fault->count = edge->count;
    fault->clock_us = edge->clock_us;
    fault->value = edge->value;
    fault->event = ++module->event_number;
    fault->told = PB_VARIANT(fault_without_holder_silent) && !module->lease.held;
    fault->interval_ms = PB_LIMIT_FAULT_REPEAT_FIRST;
    fault->next_send_us = module->now_us + (PB_VARIANT(fault_told_late) ? 400000 : 0);
    module->faults.unrecorded &= (uint16_t)~bit(code);
}

/* Records what found no place, as far as there is place now and its condition still stands. One that is gone is
 * recorded only if the latch it set could not be cleared otherwise, because nothing else is latched. */
void pb_faults_record_waiting(struct pb_module *module)
{
    if (PB_VARIANT(overflow_forgets_standing))
        return;
    for (uint8_t code = 1; code < PB_FAULT_CODES && module->faults.unrecorded != 0; code++) {
        if ((module->faults.unrecorded & bit(code)) == 0)
            continue;
        const bool is_needed = pb_fault_is_latching(code) && module->state.fault_latch &&
                               pb_faults_latched_count(module) == 0;
        struct pb_fault *place = find_place(module, code);
        if (place != NULL && (pb_faults_is_standing(module, code) || is_needed))
            record(module, place, code);
    }
}

static void note_edge(struct pb_module *module, uint8_t code)
{
    struct pb_edge *edge = &module->faults.edges[code];
    if (!PB_VARIANT(count_stays_one) || edge->count == 0)
        edge->count++;
    edge->clock_us = pb_state_clock(module, module->now_us);
    edge->value = measured(module, code);
}

static void lose(struct pb_module *module, uint8_t code)
{
    if (module->faults.lost < UINT16_MAX)
        module->faults.lost++;
    module->faults.unrecorded |= bit(code);
    struct pb_fault *place = find_place(module, PB_FAULT_LIST_OVERFLOW);
    if (place != NULL) {
        note_edge(module, PB_FAULT_LIST_OVERFLOW);
        record(module, place, PB_FAULT_LIST_OVERFLOW);
    }
}

static void occur(struct pb_module *module, uint8_t code)
{
    note_edge(module, code);
    struct pb_fault *place = find_place(module, code);
    if (place != NULL)
        record(module, place, code);
    else
        lose(module, code);
    if (PB_VARIANT(overflow_sets_no_latch) && place == NULL)
        return;
    if (!pb_fault_is_latching(code))
        return;
    module->state.fault_latch = true;
    pb_ending_stop_all(module, PB_VARIANT(fault_said_halt) ? PB_CAUSE_HALT : PB_CAUSE_FAULT);
    pb_state_settle_power(module);
}

/* ------------------------------------------------------------------------------------------------ conditions */

void pb_faults_start(struct pb_module *module, uint16_t surviving)
{
    pb_clear(&module->faults, sizeof module->faults);
    for (uint8_t code = 1; code < PB_FAULT_CODES; code++)
        if ((surviving & bit(code)) != 0)
            pb_faults_raise(module, code);
}

void pb_faults_raise(struct pb_module *module, uint8_t code)
{
    if (pb_faults_is_standing(module, code) && !PB_VARIANT(standing_raises_again))
        return;
    module->faults.standing |= bit(code);
    occur(module, code);
}

void pb_faults_happen(struct pb_module *module, uint8_t code)
{
    if (!pb_faults_is_standing(module, code))
        occur(module, code);
}

void pb_faults_withdraw(struct pb_module *module, uint8_t code)
{
    module->faults.standing &= (uint16_t)~bit(code);
    if (PB_VARIANT(fault_clears_itself)) {
        for (unsigned i = 0; i <= module->config->faults; i++)
            if (module->faults.list[i].code == code)
                module->faults.list[i].latched = false;
        pb_faults_after_clear(module);
    }
    pb_faults_record_waiting(module);
}

struct pb_fault *pb_faults_latched(struct pb_module *module, int64_t occurrence)
{
    for (unsigned i = 0; i <= module->config->faults; i++) {
        struct pb_fault *fault = &module->faults.list[i];
        if (fault->used && fault->latched && fault->occurrence == occurrence)
            return fault;
    }
    return NULL;
}

bool pb_faults_has_latched_code(const struct pb_module *module, uint8_t code)
{
    for (unsigned i = 0; i <= module->config->faults; i++)
        if (module->faults.list[i].latched && module->faults.list[i].code == code)
            return true;
    return false;
}

unsigned pb_faults_latched_count(const struct pb_module *module)
{
    unsigned count = 0;
    for (unsigned i = 0; i <= module->config->faults; i++)
        if (module->faults.list[i].latched)
            count++;
    return count;
}

void pb_faults_after_clear(struct pb_module *module)
{
    if (pb_faults_latched_count(module) == 0 || PB_VARIANT(one_clear_opens_latch))
        module->state.fault_latch = false;
    pb_faults_record_waiting(module);
    if (pb_faults_latched_count(module) > 0 && !PB_VARIANT(one_clear_opens_latch))
        module->state.fault_latch = true;
    else
        module->faults.unrecorded &= module->faults.standing;
}

/* ------------------------------------------------------------------------------------------------ reading */

unsigned pb_faults_held(const struct pb_module *module)
{
    unsigned held = 0;
    for (unsigned i = 0; i <= module->config->faults; i++)
        if (module->faults.list[i].used)
            held++;
    return held;
}

const struct pb_fault *pb_faults_entry(const struct pb_module *module, unsigned age)
{
    const struct pb_fault *list = module->faults.list;
    for (unsigned i = 0; i <= module->config->faults; i++) {
        unsigned newer = 0;
        for (unsigned k = 0; k <= module->config->faults; k++)
            if (list[k].used && (PB_VARIANT(faults_oldest_first) ? list[k].occurrence < list[i].occurrence
                                                                 : list[k].occurrence > list[i].occurrence))
                newer++;
        if (list[i].used && newer == age)
            return &list[i];
    }
    return NULL;
}

void pb_faults_stamp(struct pb_module *module, uint32_t change)
{
    for (unsigned i = 0; i <= module->config->faults; i++) {
        struct pb_fault *fault = &module->faults.list[i];
        if (fault->unstamped)
            fault->change = change;
        fault->unstamped = false;
    }
}
