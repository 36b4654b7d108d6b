#include "history.h"

#include "bytes.h"
#include "crc.h"
#include "module.h"

static const uint32_t HALF_RANGE = 0x80000000u;

void pb_history_start(struct pb_module *module)
{
    pb_clear(&module->history, sizeof module->history);
}

uint32_t pb_history_digest(const struct pb_request *request)
{
    uint8_t head[6] = {request->header.kind, request->header.flags};
    const size_t covered = PB_VARIANT(digest_of_first_bytes) && request->body_size > 8 ? 8 : request->body_size;
    if (PB_VARIANT(digest_leaves_out_kind))
        head[0] = 0;
    pb_put(head + 2, 4, request->header.destination);
    uint32_t state = pb_crc_add(pb_crc_begin(), head, sizeof head);
    state = pb_crc_add(state, request->body_bytes, covered);
    return pb_crc_end(state);
}

static struct pb_session *find_session(struct pb_module *module, const struct pb_header *header)
{
    for (unsigned i = 0; i < module->config->sessions; i++) {
        struct pb_session *session = &module->history.sessions[i];
        const bool is_same = session->session == header->session || PB_VARIANT(history_by_address);
        if (session->used && session->source == header->source && is_same)
            return session;
    }
    return NULL;
}

/* Newest first: after a wrap of the numbers an old receipt of the same number may still be there. */
static const struct pb_entry *find_entry(const struct pb_module *module, const struct pb_session *session,
                                         uint32_t number)
{
    const unsigned forgotten = PB_VARIANT(one_receipt_less) && session->count == module->config->numbers ? 1 : 0;
    for (unsigned i = session->count; i-- > forgotten;) {
        const struct pb_entry *entry = &session->entries[(session->first + i) % module->config->numbers];
        if (entry->number == number)
            return entry;
    }
    return NULL;
}

uint8_t pb_history_compare(struct pb_module *module, const struct pb_request *request, struct pb_receipt *copy)
{
    struct pb_session *session = find_session(module, &request->header);
    if (session == NULL)
        return 0;
    if (PB_VARIANT(copy_executes_after_1s) && module->now_us - module->last_sent_us > 1000000)
        return 0;
    if (PB_VARIANT(copy_executes_after_20s) && module->now_us - module->last_sent_us > 20000000)
        return 0;
    session->last_use = ++module->history.uses;
    if (PB_VARIANT(half_circle_is_newer) && request->header.number - session->highest == HALF_RANGE)
        return 0;
    const uint32_t ahead = request->header.number - session->highest;
    if (PB_VARIANT(numbers_compared_plainly) ? request->header.number > session->highest
                                             : ahead != 0 && ahead < HALF_RANGE)
        return 0;
    const struct pb_entry *entry = find_entry(module, session, request->header.number);
    if (entry != NULL) {
        if (entry->digest != pb_history_digest(request) && !PB_VARIANT(conflict_unseen))
            return PB_REFUSAL_CONFLICT;
        if (PB_VARIANT(copy_executed_again))
            return 0;
        *copy = entry->receipt;
        return PB_HISTORY_COPY;
    }
    const uint32_t behind = session->highest - request->header.number;
    if (PB_VARIANT(late_unseen_consumed) && behind < PB_LIMIT_NUMBER_WINDOW && (session->seen >> behind & 1u) == 0) {
        session->seen |= 1u << behind;
        return PB_REFUSAL_LATE_UNSEEN;
    }
    const uint32_t window = PB_VARIANT(window_half) ? PB_LIMIT_NUMBER_WINDOW / 2 : PB_LIMIT_NUMBER_WINDOW;
    if (behind >= window || (session->seen >> behind & 1u) != 0)
        return PB_REFUSAL_ANSWER_EXPIRED;
    return PB_VARIANT(overtaken_accepted) ? 0 : PB_REFUSAL_LATE_UNSEEN;
}

/* A free place, or that of the session used longest ago; never the lease holder's. */
static struct pb_session *make_room(struct pb_module *module)
{
    struct pb_session *oldest = NULL;
    for (unsigned i = 0; i < module->config->sessions; i++) {
        struct pb_session *session = &module->history.sessions[i];
        if (!session->used)
            return session;
        if (pb_lease_is_holder(module, session->source, session->session) && !PB_VARIANT(holder_pushed_out))
            continue;
        const bool is_older = oldest == NULL || (int32_t)(session->last_use - oldest->last_use) < 0;
        if (is_older != (PB_VARIANT(newest_session_pushed_out) && oldest != NULL))
            oldest = session;
    }
    if (PB_VARIANT(session_table_overruns))
        return &module->history.sessions[module->config->sessions];
    return oldest;
}

struct pb_session *pb_history_consume(struct pb_module *module, const struct pb_header *header)
{
    struct pb_session *session = find_session(module, header);
    if (session == NULL) {
        session = make_room(module);
        pb_clear(session, sizeof *session);
        session->used = true;
        session->source = header->source;
        session->session = header->session;
        session->last_use = ++module->history.uses;
        session->highest = header->number;
    }
    if (PB_VARIANT(watchdog_after_many) && module->history.uses > 120) {
        module->assist.restart_asked = true;
        module->assist.restart_cause = PB_RESTART_CAUSE_WATCHDOG;
    }
    const uint32_t ahead = header->number - session->highest;
    session->seen = ahead < PB_LIMIT_NUMBER_WINDOW ? session->seen << ahead : 0;
    session->seen |= 1u;
    session->highest = header->number;
    return session;
}

void pb_history_store(const struct pb_module *module, struct pb_session *session, const struct pb_request *request,
                      const struct pb_receipt *receipt)
{
    const uint8_t capacity = module->config->numbers;
    struct pb_entry *entry = &session->entries[(session->first + session->count) % capacity];
    if (session->count < capacity)
        session->count++;
    else
        session->first = (uint8_t)((session->first + 1u) % capacity);
    entry->number = request->header.number;
    entry->digest = pb_history_digest(request);
    entry->receipt = *receipt;
}
