#include "answers.h"

#include "bytes.h"
#include "module.h"

void pb_answers_start(struct pb_module *module)
{
    pb_clear(&module->answers, sizeof module->answers);
}

struct pb_answer pb_answer_to(const struct pb_module *module, const struct pb_header *header, uint8_t kind)
{
    struct pb_answer answer;
    pb_clear(&answer, sizeof answer);
    answer.kind = kind;
    answer.source = module->address;
    answer.destination = header->source;
    answer.session = header->session;
    answer.number = header->number;
    answer.receipt.key = PB_NO_KEY;
    return answer;
}

bool pb_answers_have_room(const struct pb_module *module)
{
    return module->answers.count < PB_MAX_ANSWERS;
}

/* By how much some broken variants answer late. */
static uint64_t delay_us(const struct pb_module *module)
{
    if (PB_VARIANT(late_beside_others) && module->drops[PB_DROP_OTHER_ADDRESS - 1] > 0)
        return 30000;
    if (PB_VARIANT(answers_slow_down))
        return 20u * (uint64_t)module->answers.queued;
    if (PB_VARIANT(telemetry_delays_answers) && module->telemetry.active)
        return module->telemetry.next_us - module->now_us;
    for (unsigned i = 0; PB_VARIANT(unicast_behind_many) && i < PB_MAX_SESSIONS; i++)
        if (module->answers.many[i].waiting)
            return module->answers.many[i].answer.due_us - module->now_us;
    return 0;
}

uint32_t pb_answers_queue(struct pb_module *module, const struct pb_answer *answer)
{
    struct pb_answers *answers = &module->answers;
    struct pb_answer *place = &answers->unicast[(answers->first + answers->count) % PB_MAX_ANSWERS];
    *place = *answer;
    place->due_us = module->now_us + module->config->receipt_delay_us + delay_us(module);
    if (PB_VARIANT(answers_go_to_the_latest))
        for (unsigned i = 0; i < PB_MAX_ANSWERS; i++)
            answers->unicast[i].destination = answer->destination;
    if (PB_VARIANT(reads_overtake_receipts) && answers->count > 0 && answer->kind != PB_KIND_RECEIPT) {
        struct pb_answer *before = &answers->unicast[(answers->first + answers->count - 1u) % PB_MAX_ANSWERS];
        const struct pb_answer read = *place;
        *place = *before;
        *before = read;
    }
    answers->count++;
    return ++answers->queued;
}

void pb_answers_queue_halt(struct pb_module *module, const struct pb_answer *answer)
{
    struct pb_answers *answers = &module->answers;
    if (answers->halt_count == PB_MAX_HALT_ANSWERS)
        return;
    struct pb_answer *place = &answers->halts[answers->halt_count++];
    *place = *answer;
    place->due_us = module->now_us + module->config->turnaround_us;
    if (PB_VARIANT(halt_late_after_flood) && module->drops[PB_DROP_OTHER_ADDRESS - 1] > 100)
        place->due_us += 30000;
}

/* The place of the answer that waits for this session, else a free one, else null. */
static const struct pb_many_answer *many_place(const struct pb_module *module, uint32_t destination, uint32_t session)
{
    const struct pb_many_answer *free_place = NULL;
    for (unsigned i = 0; i < PB_MAX_SESSIONS; i++) {
        const struct pb_many_answer *place = &module->answers.many[i];
        if (place->waiting && place->answer.destination == destination && place->answer.session == session)
            return place;
        if (!place->waiting && free_place == NULL)
            free_place = place;
    }
    return free_place;
}

bool pb_answers_have_room_for_many(const struct pb_module *module, const struct pb_header *header)
{
    return many_place(module, header->source, header->session) != NULL;
}

void pb_answers_queue_many(struct pb_module *module, const struct pb_answer *answer, uint32_t window_ms)
{
    const struct pb_many_answer *found = many_place(module, answer->destination, answer->session);
    if (found == NULL || (PB_VARIANT(first_to_many_stays) && found->waiting))
        return;
    if (PB_VARIANT(no_window_leaves_waiting) && window_ms == 0)
        return;
    struct pb_many_answer *place = &module->answers.many[found - module->answers.many];
    place->waiting = window_ms > (PB_VARIANT(shortest_window_unanswered) ? 1u : 0u);
    place->answer = *answer;
    if (PB_VARIANT(window_answered_at_once))
        window_ms = 1;
    if (PB_VARIANT(window_used_to_two_thirds))
        window_ms = window_ms * 2u / 3u;
    if (PB_VARIANT(answer_to_many_from_broadcast) && answer->kind == PB_KIND_RECEIPT)
        place->answer.source = PB_ADDRESS_BROADCAST;
    if (PB_VARIANT(window_not_spread))
        place->answer.due_us = module->now_us + 1000u * (uint64_t)window_ms;
    else
        place->answer.due_us = module->now_us + pb_random_up_to(&module->random, 1000u * window_ms);
}

bool pb_answers_have_left(const struct pb_module *module, uint32_t serial)
{
    return (int32_t)(module->answers.left - serial) >= 0;
}

uint64_t pb_answers_next_due(const struct pb_module *module)
{
    const struct pb_answers *answers = &module->answers;
    uint64_t due_us = PB_NEVER;
    if (answers->halt_count > 0)
        due_us = answers->halts[0].due_us;
    if (answers->count > 0)
        due_us = pb_earlier(due_us, answers->unicast[answers->first].due_us);
    for (unsigned i = 0; i < PB_MAX_SESSIONS; i++)
        if (answers->many[i].waiting)
            due_us = pb_earlier(due_us, answers->many[i].answer.due_us);
    return due_us;
}

void pb_answers_send_halts(struct pb_module *module)
{
    struct pb_answers *answers = &module->answers;
    while (answers->halt_count > 0 && answers->halts[0].due_us <= module->now_us) {
        if (!pb_encode_answer(module, &answers->halts[0]))
            return;
        answers->halt_count--;
        for (unsigned i = 0; i < answers->halt_count; i++)
            answers->halts[i] = answers->halts[i + 1];
    }
}

void pb_answers_send_unicast(struct pb_module *module)
{
    struct pb_answers *answers = &module->answers;
    while (answers->count > 0 && answers->unicast[answers->first].due_us <= module->now_us) {
        if (!pb_encode_answer(module, &answers->unicast[answers->first]))
            return;
        answers->first = (uint8_t)((answers->first + 1u) % PB_MAX_ANSWERS);
        answers->count--;
        answers->left++;
    }
}

void pb_answers_send_many(struct pb_module *module)
{
    for (unsigned i = 0; i < PB_MAX_SESSIONS; i++) {
        struct pb_many_answer *place = &module->answers.many[i];
        const bool is_halt = place->waiting && place->answer.kind == PB_KIND_HALT_RECEIPT;
        if (PB_VARIANT(halt_to_many_delayed) && is_halt && place->answer.due_us <= module->now_us)
            place->answer.first = pb_state_halt(module, PB_HALT_CAUSE_REQUEST);
        if (place->waiting && place->answer.due_us <= module->now_us && pb_encode_answer(module, &place->answer))
            place->waiting = false;
    }
}
