#include "encode.h"

#include "bytes.h"
#include "module.h"
#include "send.h"

/* ------------------------------------------------------------------------------------------------ parts */

static void write_majors(struct pb_writer *body, uint8_t key)
{
    pb_write_list_field(body, key, 1);
    pb_write_integer(body, PB_MAJOR);
}

void pb_encode_hardware_id(const struct pb_module *module, struct pb_writer *body, uint8_t key)
{
    pb_write_bytes_field(body, key, module->config->hardware_id, PB_HARDWARE_ID_SIZE);
}

void pb_encode_temperatures(const struct pb_module *module, struct pb_writer *body, uint8_t key)
{
    pb_write_list_field(body, key, module->config->temperature_count);
    for (unsigned i = 0; i < module->config->temperature_count; i++)
        pb_write_integer(body, module->config->temperatures[i]);
}

/* Items of page `page`: where it begins, and how many are on it. */
static unsigned page_begin(uint32_t page, unsigned page_size, unsigned total, unsigned *count)
{
    unsigned begin = (unsigned)page * page_size;
    if (PB_VARIANT(page_past_end_is_last) && total > 0 && begin >= total)
        begin = (total - 1u) / page_size * page_size;
    *count = begin >= total ? 0 : total - begin;
    if (*count > page_size)
        *count = page_size;
    return begin;
}

/* ------------------------------------------------------------------------------------------------ answers */

static void write_carried(struct pb_writer *body, const struct pb_receipt *receipt)
{
    switch (receipt->carries) {
    case PB_CARRIES_EPOCH_AND_LEASE:
        pb_write_field(body, PB_KEY_RECEIPT_EPOCH, receipt->first);
        pb_write_field(body, PB_KEY_RECEIPT_LEASE, receipt->second);
        break;
    case PB_CARRIES_LEASE:
        pb_write_field(body, PB_KEY_RECEIPT_LEASE, receipt->first);
        break;
    case PB_CARRIES_HOLDER:
        pb_write_field(body, PB_KEY_RECEIPT_HOLDER, receipt->first);
        pb_write_field(body, PB_KEY_RECEIPT_HOLDER_SESSION, receipt->second);
        break;
    case PB_CARRIES_HALT_COUNT:
        pb_write_field(body, PB_KEY_RECEIPT_HALT_COUNT, receipt->first);
        break;
    case PB_CARRIES_MAJORS:
        write_majors(body, PB_KEY_RECEIPT_MAJORS);
        break;
    default:
        break;
    }
}

static void write_receipt(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body)
{
    static const uint8_t CARRIED_PAIRS[] = {0, 2, 1, 2, 1, 1}; /* by pb_carries */
    const struct pb_receipt *receipt = &answer->receipt;
    const bool is_refused = receipt->reason != 0;
    const bool has_key = receipt->key != PB_NO_KEY;
    (void)module;
    pb_write_map(body, 1u + is_refused + has_key + CARRIED_PAIRS[receipt->carries]);
    pb_write_field(body, PB_KEY_RECEIPT_RESULT, is_refused ? PB_RESULT_REFUSED : PB_RESULT_ACCEPTED);
    if (is_refused)
        pb_write_field(body, PB_KEY_RECEIPT_REASON, receipt->reason);
    if (has_key)
        pb_write_field(body, PB_KEY_RECEIPT_KEY, receipt->key);
    write_carried(body, receipt);
}

static uint32_t declared_motions(const struct pb_config *config)
{
    uint32_t motions = 0;
    for (unsigned i = 0; i < config->motion_count; i++)
        motions |= 1u << config->motions[i].motion;
    return motions;
}

static void write_description(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body)
{
    const struct pb_config *config = module->config;
    (void)answer;
    pb_write_map(body, 20);
    pb_encode_hardware_id(module, body, PB_KEY_DESCRIPTION_HARDWARE_ID);
    pb_write_bytes_field(body, PB_KEY_DESCRIPTION_BUILD, config->build, PB_BUILD_SIZE);
    write_majors(body, PB_KEY_DESCRIPTION_MAJORS);
    pb_write_field(body, PB_KEY_DESCRIPTION_MINOR, PB_MINOR);
    const bool is_changed = PB_VARIANT(description_changes_with_start) && module->epoch % 2 == 0;
    pb_write_field(body, PB_KEY_DESCRIPTION_NATURE, config->nature);
    pb_write_field(body, PB_KEY_DESCRIPTION_CAPABILITIES, config->capabilities);
    pb_write_field(body, PB_KEY_DESCRIPTION_MOTIONS, declared_motions(config));
    pb_write_field(body, PB_KEY_DESCRIPTION_EPOCH, module->epoch);
    pb_write_field(body, PB_KEY_DESCRIPTION_LEASE, module->lease.number);
    pb_write_field(body, PB_KEY_DESCRIPTION_FACES, config->face_count);
    pb_write_field(body, PB_KEY_DESCRIPTION_SESSIONS, config->sessions);
    pb_write_field(body, PB_KEY_DESCRIPTION_NUMBERS, config->numbers);
    pb_write_field(body, PB_KEY_DESCRIPTION_QUEUE, config->queue);
    pb_write_field(body, PB_KEY_DESCRIPTION_OUTCOMES, config->outcomes);
    pb_write_field(body, PB_KEY_DESCRIPTION_FAULTS, config->faults);
    pb_write_field(body, PB_KEY_DESCRIPTION_GROUPS, config->groups);
    pb_write_field(body, PB_KEY_DESCRIPTION_RECEIPT_MS, config->receipt_ms);
    pb_write_field(body, PB_KEY_DESCRIPTION_STARTING_MS, config->starting_ms);
    pb_write_field(body, PB_KEY_DESCRIPTION_STOP_MS, is_changed ? config->stop_ms + 1 : config->stop_ms);
    pb_write_field(body, PB_KEY_DESCRIPTION_TURNAROUND_US, config->turnaround_us);
}

static void write_faces(const struct pb_module *module, struct pb_writer *body)
{
    pb_write_list_field(body, PB_KEY_STATUS_REPORT_FACES, module->plant.face_count);
    for (unsigned i = 0; i < module->plant.face_count; i++) {
        const struct pb_face *face = &module->plant.faces[i];
        pb_write_list(body, 3);
        pb_write_integer(body, face->bonded);
        pb_write_integer(body, face->neighbour);
        pb_write_integer(body, face->orientation);
    }
}

static void write_status(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body)
{
    const struct pb_state *state = &module->state;
    const struct pb_lease *lease = &module->lease;
    (void)answer;
    pb_write_map(body, 24);
    pb_write_field(body, PB_KEY_STATUS_REPORT_CHANGE, state->change);
    pb_write_field(body, PB_KEY_STATUS_REPORT_EPOCH, module->epoch);
    pb_write_field(body, PB_KEY_STATUS_REPORT_STATE, pb_state_displayed(module));
    const bool is_hidden = PB_VARIANT(status_hides_motion) && state->activity == PB_ACTIVITY_MOVING;
    pb_write_field(body, PB_KEY_STATUS_REPORT_ACTIVITY, is_hidden ? PB_ACTIVITY_ENERGIZED : state->activity);
    pb_write_bool_field(body, PB_KEY_STATUS_REPORT_HALT_LATCH, state->halt_latch);
    pb_write_bool_field(body, PB_KEY_STATUS_REPORT_FAULT_LATCH, state->fault_latch);
    pb_write_field(body, PB_KEY_STATUS_REPORT_HALT_COUNT, state->halt_count);
    pb_write_field(body, PB_KEY_STATUS_REPORT_HALT_CAUSE, state->halt_cause);
    pb_write_field(body, PB_KEY_STATUS_REPORT_RESTART_CAUSE, state->restart_cause);
    pb_write_field(body, PB_KEY_STATUS_REPORT_LEASE, lease->number);
    pb_write_field(body, PB_KEY_STATUS_REPORT_HOLDER, lease->source);
    pb_write_field(body, PB_KEY_STATUS_REPORT_HOLDER_SESSION, lease->session);
    pb_write_field(body, PB_KEY_STATUS_REPORT_QUEUED, pb_slots_count(module, PB_SLOT_QUEUED));
    pb_write_field(body, PB_KEY_STATUS_REPORT_SCHEDULED, pb_slots_count(module, PB_SLOT_SCHEDULED));
    pb_write_field(body, PB_KEY_STATUS_REPORT_UNCONFIRMED, pb_slots_count(module, PB_SLOT_FORMED));
    pb_write_bool_field(body, PB_KEY_STATUS_REPORT_POSITION_KNOWN, module->motion.position_known);
    pb_write_field(body, PB_KEY_STATUS_REPORT_POSITION, module->plant.position);
    write_faces(module, body);
    pb_write_field(body, PB_KEY_STATUS_REPORT_LATCHED_FAULTS, pb_faults_latched_count(module));
    pb_write_field(body, PB_KEY_STATUS_REPORT_CLOCK, pb_state_clock(module, module->now_us));
    const bool is_whole = PB_VARIANT(lease_remaining_is_duration) && lease->held;
    pb_write_field(body, PB_KEY_STATUS_REPORT_LEASE_REMAINING,
                   is_whole ? lease->duration_ms : pb_lease_remaining_ms(module));
    pb_write_field(body, PB_KEY_STATUS_REPORT_SUPPLY, module->config->supply_mv);
    pb_write_field(body, PB_KEY_STATUS_REPORT_BATTERY, module->config->battery_permille);
    pb_encode_temperatures(module, body, PB_KEY_STATUS_REPORT_TEMPERATURES);
}

static void write_presence(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body)
{
    (void)answer;
    pb_write_map(body, 4);
    pb_encode_hardware_id(module, body, PB_KEY_PRESENCE_HARDWARE_ID);
    pb_write_field(body, PB_KEY_PRESENCE_EPOCH, module->epoch);
    pb_write_field(body, PB_KEY_PRESENCE_NATURE, module->config->nature);
    pb_write_field(body, PB_KEY_PRESENCE_STATE, pb_state_displayed(module));
}

static void write_counters(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body)
{
    (void)answer;
    pb_write_map(body, 2);
    pb_write_list_field(body, PB_KEY_COUNTERS_DROPS, PB_DROP_REASONS);
    for (unsigned i = 0; i < PB_DROP_REASONS; i++)
        pb_write_integer(body, module->drops[i]);
    pb_write_field(body, PB_KEY_COUNTERS_SILENT_REFUSALS, module->silent_refusals);
    if (PB_VARIANT(reading_clears_counters))
        pb_clear(module->drops, sizeof module->drops);
}

static void write_fault_page(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body)
{
    unsigned count;
    const unsigned total = pb_faults_held(module);
    const unsigned begin = page_begin(answer->first, PB_LIMIT_RECORD_PAGE, total, &count);
    pb_write_map(body, 3);
    pb_write_field(body, PB_KEY_FAULT_PAGE_TOTAL, total);
    pb_write_field(body, PB_KEY_FAULT_PAGE_LOST, module->faults.lost);
    pb_write_list_field(body, PB_KEY_FAULT_PAGE_ENTRIES, count);
    for (unsigned i = 0; i < count; i++) {
        const struct pb_fault *fault = pb_faults_entry(module, begin + i);
        pb_write_list(body, 10);
        pb_write_integer(body, fault->occurrence);
        pb_write_integer(body, fault->code);
        pb_write_integer(body, pb_fault_class(fault->code));
        pb_write_integer(body, pb_fault_is_latching(fault->code) ? PB_SEVERITY_LATCHING : PB_SEVERITY_NOTICE);
        pb_write_integer(body, fault->count);
        pb_write_integer(body, PB_VARIANT(fault_time_of_reading) ? pb_state_clock(module, module->now_us)
                                                                 : fault->clock_us);
        pb_write_integer(body, fault->value);
        pb_write_integer(body, pb_faults_is_standing(module, fault->code));
        pb_write_integer(body, fault->latched);
        pb_write_integer(body, fault->told);
    }
}

static void write_motion_page(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body)
{
    unsigned count;
    const unsigned total = pb_slots_formed(module);
    const unsigned begin = page_begin(answer->first, PB_LIMIT_RECORD_PAGE, total, &count);
    pb_write_map(body, 2);
    pb_write_field(body, PB_KEY_MOTION_PAGE_TOTAL, total);
    pb_write_list_field(body, PB_KEY_MOTION_PAGE_ENTRIES, count);
    for (unsigned i = 0; i < count; i++) {
        const struct pb_slot *slot = pb_slots_entry(module, begin + i);
        pb_write_list(body, 9);
        pb_write_integer(body, slot->event);
        pb_write_integer(body, slot->source);
        pb_write_integer(body, slot->session);
        pb_write_integer(body, slot->number);
        pb_write_integer(body, slot->motion);
        pb_write_integer(body, slot->outcome);
        pb_write_integer(body, slot->cause);
        pb_write_integer(body, slot->magnitude);
        pb_write_integer(body, slot->state == PB_SLOT_CONFIRMED);
    }
}

static void write_time(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body)
{
    pb_write_map(body, 3);
    pb_write_field(body, PB_KEY_TIME_ANSWER_T1, answer->first);
    const uint32_t sent = pb_state_clock(module, module->wall_us);
    const uint32_t arrived = PB_VARIANT(arrival_taken_at_sending) ? sent : answer->second;
    pb_write_field(body, PB_KEY_TIME_ANSWER_T2, PB_VARIANT(exchange_times_swapped) ? sent : arrived);
    pb_write_field(body, PB_KEY_TIME_ANSWER_T3, PB_VARIANT(exchange_times_swapped) ? arrived : sent);
    if (PB_VARIANT(exchange_sets_clock))
        module->state.clock_offset_us += answer->first - sent;
}

static void write_motion_description(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body)
{
    const struct pb_motion_config *motion = pb_config_motion(module->config, answer->first);
    if (PB_VARIANT(undeclared_motion_described) && motion == NULL)
        motion = &module->config->motions[0];
    pb_write_map(body, 10);
    pb_write_field(body, PB_KEY_MOTION_DESCRIPTION_MOTION, motion->motion);
    pb_write_field(body, PB_KEY_MOTION_DESCRIPTION_ACTUATOR, motion->actuator);
    pb_write_field(body, PB_KEY_MOTION_DESCRIPTION_MAGNITUDE_MIN, motion->magnitude_min);
    pb_write_field(body, PB_KEY_MOTION_DESCRIPTION_MAGNITUDE_MAX, motion->magnitude_max);
    pb_write_field(body, PB_KEY_MOTION_DESCRIPTION_TYPICAL_MS, motion->typical_ms);
    const unsigned beyond_ms = PB_VARIANT(longest_beyond_limit) ? PB_LIMIT_MOTION_TIME_LONGEST_MAX : 0;
    pb_write_field(body, PB_KEY_MOTION_DESCRIPTION_LONGEST_MS, motion->longest_ms + beyond_ms);
    pb_write_field(body, PB_KEY_MOTION_DESCRIPTION_NO_RETURN_MS, motion->no_return_ms);
    pb_write_field(body, PB_KEY_MOTION_DESCRIPTION_HALT_CATEGORY, motion->halt_category);
    pb_write_field(body, PB_KEY_MOTION_DESCRIPTION_LEASE_END_CATEGORY, motion->lease_end_category);
    pb_write_field(body, PB_KEY_MOTION_DESCRIPTION_FAULT_CATEGORY, motion->fault_category);
}

static void write_groups(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body)
{
    const struct pb_settings *settings = &module->storage.kept;
    (void)answer;
    pb_write_map(body, 1);
    pb_write_list_field(body, PB_KEY_GROUP_LIST_GROUPS, settings->group_count);
    for (unsigned i = 0; i < settings->group_count; i++)
        pb_write_integer(body, settings->groups[i]);
}

static void write_truth_page(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body)
{
    enum { TRUTH_PAGE = 8 };
    unsigned count;
    const unsigned begin = page_begin(answer->first, TRUTH_PAGE, module->truth.count, &count);
    pb_write_map(body, 5);
    pb_write_field(body, PB_KEY_TRUTH_PAGE_MOTION_STARTS, module->truth.motion_starts);
    pb_write_bool_field(body, PB_KEY_TRUTH_PAGE_ENERGIZED, module->plant.powered);
    pb_write_field(body, PB_KEY_TRUTH_PAGE_POSITION, pb_plant_position(&module->plant, module->now_us));
    pb_write_field(body, PB_KEY_TRUTH_PAGE_TOTAL, module->truth.count);
    pb_write_list_field(body, PB_KEY_TRUTH_PAGE_ENTRIES, count);
    for (unsigned i = 0; i < count; i++) {
        const unsigned age = PB_VARIANT(truth_oldest_first) ? module->truth.count - 1u - begin - i : begin + i;
        const struct pb_truth_entry *entry = pb_truth_entry(module, age);
        pb_write_list(body, 3);
        pb_write_integer(body, entry->clock_us);
        pb_write_integer(body, entry->event);
        pb_write_integer(body, entry->position);
    }
}

static void write_halt_receipt(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body)
{
    pb_write_map(body, 3);
    pb_write_field(body, PB_KEY_HALT_RECEIPT_DISPOSITION, answer->first);
    pb_write_field(body, PB_KEY_HALT_RECEIPT_HALT_COUNT, answer->second);
    pb_write_field(body, PB_KEY_HALT_RECEIPT_EPOCH, module->epoch);
}

static const struct {
    uint8_t kind;
    void (*write)(struct pb_module *module, const struct pb_answer *answer, struct pb_writer *body);
} ANSWER_BODIES[] = {
    {PB_KIND_RECEIPT, write_receipt},
    {PB_KIND_DESCRIPTION, write_description},
    {PB_KIND_STATUS_REPORT, write_status},
    {PB_KIND_PRESENCE, write_presence},
    {PB_KIND_COUNTERS, write_counters},
    {PB_KIND_FAULT_PAGE, write_fault_page},
    {PB_KIND_MOTION_PAGE, write_motion_page},
    {PB_KIND_TIME_ANSWER, write_time},
    {PB_KIND_MOTION_DESCRIPTION, write_motion_description},
    {PB_KIND_GROUP_LIST, write_groups},
    {PB_KIND_TRUTH_PAGE, write_truth_page},
    {PB_KIND_HALT_RECEIPT, write_halt_receipt},
};

bool pb_encode_answer(struct pb_module *module, const struct pb_answer *answer)
{
    struct pb_outgoing outgoing;
    pb_outgoing_begin(&outgoing, answer->kind, answer->source);
    pb_outgoing_to(&outgoing, answer->destination, answer->session, answer->number);
    for (size_t i = 0; i < sizeof ANSWER_BODIES / sizeof ANSWER_BODIES[0]; i++)
        if (ANSWER_BODIES[i].kind == answer->kind)
            ANSWER_BODIES[i].write(module, answer, &outgoing.body);
    return pb_outgoing_send(module, &outgoing);
}
