/* Answers waiting to be sent; encoded when they leave. */
#ifndef PB_ANSWERS_H
#define PB_ANSWERS_H

#include <stdbool.h>
#include <stdint.h>

#include "request.h"
#include "sizes.h"

struct pb_module;

struct pb_answer {
    uint8_t kind;
    uint32_t source; /* the module's address when the request was judged */
    uint32_t destination;
    uint32_t session;
    uint32_t number;
    uint64_t due_us;
    struct pb_receipt receipt; /* receipts */
    uint32_t first;            /* page, motion, t1, disposition */
    uint32_t second;           /* t2, halt count */
};

struct pb_many_answer {
    bool waiting;
    struct pb_answer answer;
};

#define PB_MAX_HALT_ANSWERS PB_SIZE_ANSWERS_MIN

struct pb_answers {
    struct pb_answer halts[PB_MAX_HALT_ANSWERS]; /* in order of arrival */
    uint8_t halt_count;
    struct pb_answer unicast[PB_MAX_ANSWERS]; /* ring, in order of arrival */
    uint8_t first;
    uint8_t count;
    uint32_t queued; /* serial of the last queued */
    uint32_t left;   /* serial of the last sent */
    struct pb_many_answer many[PB_MAX_SESSIONS];
};

void pb_answers_start(struct pb_module *module);

/* An answer to this request with the module's address as source. */
struct pb_answer pb_answer_to(const struct pb_module *module, const struct pb_header *header, uint8_t kind);

bool pb_answers_have_room(const struct pb_module *module);

/* Queues an answer to a unicast request; only with room. Returns its serial. */
uint32_t pb_answers_queue(struct pb_module *module, const struct pb_answer *answer);

/* Without room the halt is executed all the same, and not answered. */
void pb_answers_queue_halt(struct pb_module *module, const struct pb_answer *answer);

bool pb_answers_have_room_for_many(const struct pb_module *module, const struct pb_header *header);

/* Leaves at an instant drawn from the window; none of 0 ms leaves. What waited for the same session does not. */
void pb_answers_queue_many(struct pb_module *module, const struct pb_answer *answer, uint32_t window_ms);

/* Whether the unicast answer of that serial has been sent. */
bool pb_answers_have_left(const struct pb_module *module, uint32_t serial);

uint64_t pb_answers_next_due(const struct pb_module *module);
void pb_answers_send_halts(struct pb_module *module);
void pb_answers_send_unicast(struct pb_module *module);
void pb_answers_send_many(struct pb_module *module);

#endif
