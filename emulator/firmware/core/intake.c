/* What happens to a frame that has arrived: dropped and counted, executed as a halt, confirmed, or judged. */
#include "execute.h"
#include "judge.h"
#include "module.h"

/* ------------------------------------------------------------------------------------------------ counting */

static void count(uint16_t *counter)
{
    if (*counter < PB_LIMIT_COUNTER_SATURATION || PB_VARIANT(counters_wrap))
        *counter = (uint16_t)(*counter + 1u);
}

void pb_intake_drop(struct pb_module *module, uint8_t reason)
{
    if (PB_VARIANT(drops_counted_twice) && reason == PB_DROP_CRC)
        count(&module->drops[reason - 1]);
    count(&module->drops[reason - 1]);
}

static void refuse_silently(struct pb_module *module)
{
    if (!PB_VARIANT(silent_refusal_uncounted))
        count(&module->silent_refusals);
}

/* ------------------------------------------------------------------------------------------------ addresses */

static bool is_member(const struct pb_module *module, uint32_t group)
{
    const struct pb_settings *settings = &module->storage.kept;
    if (PB_VARIANT(any_group_taken) && pb_address_is_group(group))
        return true;
    for (unsigned i = 0; i < settings->group_count; i++)
        if (settings->groups[i] == group)
            return pb_config_has(module->config, PB_CAPABILITY_GROUPS);
    return false;
}

static bool is_to_many(const struct pb_header *header)
{
    return header->destination == PB_ADDRESS_BROADCAST || pb_address_is_group(header->destination);
}

/* A module without an address hears three kinds only, and only when they go to everyone. */
static bool includes_unassigned(const struct pb_header *header)
{
    return header->destination == PB_ADDRESS_BROADCAST &&
           (header->kind == PB_KIND_HALT || header->kind == PB_KIND_PROBE || header->kind == PB_KIND_ASSIGN_ADDRESS);
}

static bool includes(const struct pb_module *module, const struct pb_header *header)
{
    if (module->address == PB_ADDRESS_UNASSIGNED)
        return includes_unassigned(header);
    if (PB_VARIANT(address_compared_in_16_bits) && !is_to_many(header))
        return (uint16_t)header->destination == (uint16_t)module->address;
    if (PB_VARIANT(old_address_answered) && header->destination == module->config->address)
        return true;
    return header->destination == module->address || header->destination == PB_ADDRESS_BROADCAST ||
           is_member(module, header->destination);
}

/* The drop reason of a source that cannot be answered, or 0. One's own address is also a fault. */
static uint8_t check_source(struct pb_module *module, const struct pb_header *header)
{
    if (module->address != PB_ADDRESS_UNASSIGNED && header->source == module->address) {
        const bool is_latched = pb_faults_has_latched_code(module, PB_FAULT_ADDRESS_CONFLICT);
        if (!PB_VARIANT(own_address_ignored) && (!is_latched || PB_VARIANT(own_source_faults_again)))
            pb_faults_happen(module, PB_FAULT_ADDRESS_CONFLICT);
        return PB_DROP_OWN_SOURCE;
    }
    if (PB_VARIANT(group_source_answered) && pb_address_is_group(header->source))
        return 0;
    return pb_address_is_unicast(header->source) ? 0 : PB_DROP_BAD_SOURCE;
}

/* ------------------------------------------------------------------------------------------------ requests */

static void read_request(struct pb_request *request, const struct pb_header *header, const uint8_t *frame, size_t size)
{
    request->header = *header;
    request->body_bytes = frame + PB_HEADER_SIZE;
    request->body_size = (uint8_t)(size - PB_HEADER_SIZE - PB_CHECK_SIZE);
    request->many = is_to_many(header);
    request->kind = pb_kind_of(header->kind);
    request->well_formed = pb_body_read(&request->body, request->body_bytes, request->body_size);
    if (!request->well_formed)
        request->body.pairs = 0;
}

static void answer_with_receipt(struct pb_module *module, const struct pb_request *request,
                                const struct pb_receipt *receipt)
{
    struct pb_answer answer = pb_answer_to(module, &request->header, PB_KIND_RECEIPT);
    answer.receipt = *receipt;
    pb_answers_queue(module, &answer);
}

/* The answer that an accepted read or command gets. */
static struct pb_answer accepted_answer(const struct pb_module *module, const struct pb_request *request,
                                        const struct pb_receipt *receipt)
{
    struct pb_answer answer = pb_answer_to(module, &request->header, request->kind->answer);
    answer.receipt = *receipt;
    switch (request->header.kind) {
    case PB_KIND_READ_FAULTS:
    case PB_KIND_READ_MOTIONS:
    case PB_KIND_READ_TRUTH:
        answer.first = (uint32_t)pb_request_number(request, PB_KEY_READ_FAULTS_PAGE, 0);
        break;
    case PB_KIND_DESCRIBE_MOTION:
        answer.first = (uint32_t)pb_request_number(request, PB_KEY_DESCRIBE_MOTION_MOTION, 0);
        break;
    case PB_KIND_TIME_EXCHANGE:
        answer.first = (uint32_t)pb_request_number(request, PB_KEY_TIME_EXCHANGE_T1, 0);
        answer.second = pb_state_clock(module, module->now_us);
        break;
    default:
        break;
    }
    return answer;
}

static void take_read(struct pb_module *module, const struct pb_request *request)
{
    const struct pb_receipt receipt = pb_judge(module, request);
    if (receipt.reason != 0) {
        answer_with_receipt(module, request, &receipt);
        return;
    }
    const struct pb_answer answer = accepted_answer(module, request, &receipt);
    if (PB_VARIANT(reads_consume_numbers))
        pb_history_consume(module, &request->header);
    if (PB_VARIANT(reads_extend_lease) && module->lease.held)
        pb_lease_extend(module);
    pb_answers_queue(module, &answer);
    if (PB_VARIANT(two_answers_to_probe) && request->header.kind == PB_KIND_PROBE)
        pb_answers_queue(module, &answer);
}

/* For the broken variants that act on what is not new. */
static bool is_taken_for_new(const struct pb_request *request, uint8_t standing)
{
    const bool is_copied_move = standing == PB_HISTORY_COPY && request->header.kind == PB_KIND_MOVE;
    return (PB_VARIANT(copied_move_made_again) && is_copied_move) ||
           (PB_VARIANT(expired_executed) && standing == PB_REFUSAL_ANSWER_EXPIRED);
}

static void take_command(struct pb_module *module, const struct pb_request *request)
{
    struct pb_receipt receipt;
    uint8_t standing = pb_history_compare(module, request, &receipt);
    if (is_taken_for_new(request, standing))
        standing = 0;
    if (standing == PB_HISTORY_COPY) {
        if (PB_VARIANT(copies_not_answered))
            return;
        if (PB_VARIANT(copied_refusal_tells_now) && receipt.reason != 0)
            receipt = pb_refusal(module, receipt.reason, receipt.key);
        if (PB_VARIANT(lease_extended_by_copy) && module->lease.held)
            pb_lease_extend(module);
        answer_with_receipt(module, request, &receipt);
        if (!PB_VARIANT(copy_brings_no_outcome))
            pb_slots_ask_resend(module, &request->header, module->answers.queued);
        return;
    }
    if (standing != 0) {
        receipt = pb_refusal(module, standing, PB_NO_KEY);
        answer_with_receipt(module, request, &receipt);
        return;
    }
    struct pb_session *session = pb_history_consume(module, &request->header);
    receipt = pb_judge(module, request);
    if (PB_VARIANT(busy_refusal_drops_queue) && receipt.reason == PB_REFUSAL_BUSY)
        pb_ending_all_waiting(module, PB_SLOT_QUEUED, PB_CAUSE_PREDECESSOR);
    if (receipt.reason == 0)
        pb_execute(module, request, module->answers.queued + 1u, &receipt);
    if (!PB_VARIANT(refusals_not_stored) || receipt.reason == 0)
        pb_history_store(module, session, request, &receipt);
    if (PB_VARIANT(unknown_kind_silent) && receipt.reason == PB_REFUSAL_UNKNOWN_KIND)
        return;
    if (PB_VARIANT(refusals_extend_lease) && module->lease.held)
        pb_lease_extend(module);
    answer_with_receipt(module, request, &receipt);
}

/* The window in which a request to many wants its answer, 0 for none: also when it cannot be read. */
static uint32_t window_ms(const struct pb_request *request)
{
    const int64_t window = pb_request_number(request, pb_kind_window_key(request->header.kind), 0);
    if (PB_VARIANT(longest_window_unanswered) && window == PB_LIMIT_ANSWER_WINDOW_MAX)
        return 0;
    return window >= 0 && window <= PB_LIMIT_ANSWER_WINDOW_MAX ? (uint32_t)window : 0;
}

/* Whether a request to many may act: newer within its session, and sound. Consumes its number. */
static bool may_act(struct pb_module *module, const struct pb_request *request, struct pb_receipt *receipt)
{
    if (request->kind->is_command) {
        if (pb_history_compare(module, request, receipt) != 0 && !PB_VARIANT(copy_to_many_acts))
            return false;
        pb_history_consume(module, &request->header);
    }
    *receipt = pb_judge(module, request);
    if (receipt->reason == 0 && request->kind->is_command)
        pb_execute(module, request, 0, receipt);
    return receipt->reason == 0;
}

static void take_from_many(struct pb_module *module, const struct pb_request *request)
{
    struct pb_receipt receipt;
    if (PB_VARIANT(de_energize_to_many) && request->header.kind == PB_KIND_DE_ENERGIZE)
        pb_state_de_energize(module);
    if (request->kind == NULL || !request->kind->many) {
        refuse_silently(module);
        return;
    }
    if (window_ms(request) > 0 && !pb_answers_have_room_for_many(module, &request->header)) {
        pb_intake_drop(module, PB_DROP_NO_ROOM);
        return;
    }
    if (!may_act(module, request, &receipt)) {
        refuse_silently(module);
        if (PB_VARIANT(refusals_to_many_answered))
            answer_with_receipt(module, request, &receipt);
        return;
    }
    const struct pb_answer answer = accepted_answer(module, request, &receipt);
    pb_answers_queue_many(module, &answer, window_ms(request));
}

static void take_request(struct pb_module *module, const struct pb_request *request)
{
    if (request->many) {
        take_from_many(module, request);
    } else if (!pb_answers_have_room(module)) {
        pb_intake_drop(module, PB_DROP_NO_ROOM);
    } else if (pb_frame_range(request->header.kind) == PB_RANGE_IS_READ) {
        take_read(module, request);
    } else {
        take_command(module, request);
    }
}

/* Another major version: the body is not read, the history not touched. */
static void refuse_version(struct pb_module *module, const struct pb_header *header)
{
    if (is_to_many(header) || PB_VARIANT(other_major_silent)) {
        refuse_silently(module);
    } else if (!pb_answers_have_room(module)) {
        pb_intake_drop(module, PB_DROP_NO_ROOM);
    } else {
        struct pb_answer answer = pb_answer_to(module, header, PB_KIND_RECEIPT);
        answer.receipt = pb_refusal(module, PB_REFUSAL_UNSUPPORTED_VERSION, PB_NO_KEY);
        pb_answers_queue(module, &answer);
    }
}

static void take_confirm(struct pb_module *module, const struct pb_request *request)
{
    uint8_t key;
    if (request->many) {
        refuse_silently(module);
        return;
    }
    const bool is_readable = pb_judge_form(request, &key) == 0;
    const int64_t event = pb_request_number(request, PB_KEY_CONFIRM_EVENT, -1);
    const bool is_of_now = pb_request_number(request, PB_KEY_CONFIRM_EPOCH, -1) == module->epoch;
    if (PB_VARIANT(confirm_answered) && is_readable)
        answer_with_receipt(module, request, &(struct pb_receipt){0, PB_NO_KEY, PB_CARRIES_NOTHING, 0, 0});
    if (is_readable && (is_of_now || PB_VARIANT(confirm_of_any_epoch)) && event >= 0 &&
        event <= UINT32_MAX) {
        if (pb_slots_confirm(module, &request->header, (uint32_t)event) ||
            pb_faults_confirm(module, &request->header, (uint32_t)event))
            return;
    }
    pb_intake_drop(module, PB_DROP_STALE_CONFIRM);
}

/* ------------------------------------------------------------------------------------------------ halt */

static bool is_length_wrong(const struct pb_header *header, size_t size)
{
    return header->body_length != size - PB_HEADER_SIZE - PB_CHECK_SIZE || header->body_length > PB_BODY_SIZE_MAX;
}

/* Whether a halt's body asks for an answer that may be given to a request to many. */
static uint32_t halt_window_ms(const struct pb_header *header, const uint8_t *frame, size_t size)
{
    struct pb_request request;
    uint8_t key;
    if (is_length_wrong(header, size))
        return 0;
    read_request(&request, header, frame, size);
    if (PB_VARIANT(halt_answered_unasked) && window_ms(&request) == 0)
        return 20;
    return pb_judge_form(&request, &key) == 0 ? window_ms(&request) : 0;
}

/* For the broken variant that treats halts as commands. */
static bool is_copied_halt(struct pb_module *module, const struct pb_header *header)
{
    struct pb_receipt receipt;
    struct pb_request request = {0};
    request.header = *header;
    if (pb_history_compare(module, &request, &receipt) != 0)
        return true;
    pb_history_consume(module, header);
    return false;
}

/* For the broken variants that ignore some halts, or do more than to halt. */
static bool is_halt_lost(struct pb_module *module, const struct pb_header *header)
{
    const bool is_odd = !pb_address_is_unicast(header->source);
    if (PB_VARIANT(halt_drops_answers))
        pb_answers_start(module);
    if (PB_VARIANT(halt_ends_lease) && module->lease.held)
        pb_lease_end(module);
    if (PB_VARIANT(halt_odd_source_dropped) && is_odd)
        pb_intake_drop(module, PB_DROP_BAD_SOURCE);
    return (PB_VARIANT(halt_odd_source_dropped) && is_odd) ||
           (PB_VARIANT(halt_version_checked) && header->version != PB_VERSION) ||
           (PB_VARIANT(halt_flags_checked) && header->flags != 0) ||
           (PB_VARIANT(halt_to_group_ignored) && pb_address_is_group(header->destination)) ||
           (PB_VARIANT(halt_only_from_holder) && module->lease.held &&
            !pb_lease_is_holder(module, header->source, header->session)) ||
           (PB_VARIANT(halt_goes_through_history) && is_copied_halt(module, header));
}

/* Nothing of the frame but kind, destination and check sequence has been looked at. */
static void take_halt(struct pb_module *module, const struct pb_header *header, const uint8_t *frame, size_t size)
{
    const uint32_t window = is_to_many(header) ? halt_window_ms(header, frame, size) : 0;
    uint8_t disposition = PB_DISPOSITION_AT_REST;
    if (is_halt_lost(module, header))
        return;
    if (!PB_VARIANT(halt_to_many_delayed) || window == 0)
        disposition = pb_state_halt(module, PB_HALT_CAUSE_REQUEST);
    if (!PB_VARIANT(halt_answered_to_nobody) &&
        (!pb_address_is_unicast(header->source) || header->source == module->address))
        return; /* nobody to answer; neither a drop nor a fault */
    struct pb_answer answer = pb_answer_to(module, header, PB_KIND_HALT_RECEIPT);
    answer.first = disposition;
    answer.second = module->state.halt_count;
    if (!is_to_many(header)) {
        pb_answers_queue_halt(module, &answer);
        return;
    }
    pb_answers_queue_many(module, &answer, window);
}

/* ------------------------------------------------------------------------------------------------ the order */

/* The drop reasons that are checked before a request is a request, in their order. 0: not dropped so far. */
static uint8_t check_before_kind(struct pb_module *module, const struct pb_header *header)
{
    if (!includes(module, header))
        return PB_DROP_OTHER_ADDRESS;
    const uint8_t unanswerable = check_source(module, header);
    if (unanswerable != 0)
        return unanswerable;
    const enum pb_kind_range range = pb_frame_range(header->kind);
    if (PB_VARIANT(foreign_events_answered) && header->version != PB_VERSION)
        return 0;
    const bool is_confirm = header->kind == PB_KIND_CONFIRM && header->version == PB_VERSION;
    const bool is_request = range == PB_RANGE_IS_READ || range == PB_RANGE_IS_COMMAND ||
                            (PB_VARIANT(answers_are_answered) && range == PB_RANGE_IS_OTHER);
    return is_confirm || is_request ? 0 : PB_DROP_NOT_A_REQUEST;
}

static void take_other(struct pb_module *module, const struct pb_header *header, const uint8_t *frame, size_t size)
{
    const uint8_t reason = check_before_kind(module, header);
    if (reason != 0) {
        pb_intake_drop(module, reason);
        return;
    }
    if (header->version != PB_VERSION && !PB_VARIANT(version_ignored)) {
        if (PB_VARIANT(version_consumes_number) && !is_to_many(header))
            pb_history_consume(module, header);
        refuse_version(module, header);
        return;
    }
    if (PB_VARIANT(long_body_dropped) && size > 230) {
        pb_intake_drop(module, PB_DROP_LENGTH);
        return;
    }
    if (is_length_wrong(header, size) && !PB_VARIANT(length_trusted)) {
        pb_intake_drop(module, PB_DROP_LENGTH);
        return;
    }
    struct pb_request request;
    read_request(&request, header, frame, size);
    if (header->kind == PB_KIND_CONFIRM)
        take_confirm(module, &request);
    else
        take_request(module, &request);
}

void pb_intake_frame(struct pb_module *module, const uint8_t *frame, size_t size)
{
    struct pb_header header;
    if (PB_VARIANT(deaf_after_garbage) && module->drops[PB_DROP_CRC - 1] > 60)
        return;
    const uint8_t reason = pb_frame_read(frame, size, &header);
    if (reason != 0) {
        pb_intake_drop(module, reason);
        if (PB_VARIANT(bad_frame_costs_the_next)) { /* skips to the next delimiter once more */
            module->stream.ended = false;
            module->stream.too_long = true;
        }
        return;
    }
    /* on the same instant a halt goes before what is due, everything else behind it */
    if (header.kind == PB_KIND_HALT && includes(module, &header)) {
        take_halt(module, &header, frame, size);
    } else {
        pb_schedule_run(module, module->now_us, true);
        take_other(module, &header, frame, size);
    }
    pb_module_after_input(module);
}
