/* A short self-test of the core: published values, refused bodies, and one exchange in virtual time. */
#include <stdio.h>
#include <string.h>

#include "body.h"
#include "bytes.h"
#include "cobs.h"
#include "crc.h"
#include "module.h"
#include "storage.h"
#include "writer.h"

enum { CONTROLLER = 0x10000, MODULE = 1, SESSION = 0x5EED };

static unsigned failures;

static void check(bool is_true, const char *what)
{
    if (!is_true) {
        failures++;
        fprintf(stderr, "FAILED: %s\n", what);
    }
}

/* ------------------------------------------------------------------------------------------------ parts */

static void check_crc(void)
{
    check(pb_crc((const uint8_t *)"123456789", 9) == PB_CRC_CHECK_VALUE, "CRC-32C of 123456789");
}

struct stuffing {
    const char *what;
    size_t plain_size;
    uint8_t plain[5];
    size_t stuffed_size;
    uint8_t stuffed[7];
};

/* The examples of the published description of COBS. */
static const struct stuffing STUFFINGS[] = {
    {"one zero", 1, {0}, 2, {1, 1}},
    {"two zeros", 2, {0, 0}, 3, {1, 1, 1}},
    {"zero, byte, zero", 3, {0, 0x11, 0}, 4, {1, 2, 0x11, 1}},
    {"a zero inside", 4, {0x11, 0x22, 0, 0x33}, 5, {3, 0x11, 0x22, 2, 0x33}},
    {"no zero", 4, {0x11, 0x22, 0x33, 0x44}, 5, {5, 0x11, 0x22, 0x33, 0x44}},
    {"zeros at the end", 4, {0x11, 0, 0, 0}, 5, {2, 0x11, 1, 1, 1}},
};

static void check_cobs(void)
{
    uint8_t bytes[PB_STUFFED_SIZE_MAX];
    size_t size;
    for (size_t i = 0; i < sizeof STUFFINGS / sizeof STUFFINGS[0]; i++) {
        const struct stuffing *row = &STUFFINGS[i];
        size = pb_cobs_encode(row->plain, row->plain_size, bytes);
        check(size == row->stuffed_size && pb_equal(bytes, row->stuffed, size), row->what);
        check(pb_cobs_decode(bytes, size, &size) && size == row->plain_size && pb_equal(bytes, row->plain, size),
              row->what);
    }
    memset(bytes, 0x55, sizeof bytes);
    check(!pb_cobs_decode(bytes, 10, &size), "a code that runs past the end");
    bytes[0] = 0xFF;
    check(!pb_cobs_decode(bytes, sizeof bytes, &size), "a code of 255 in 254 bytes");
}

struct body_case {
    bool is_sound;
    size_t size;
    uint8_t bytes[12];
};

static const struct body_case BODIES[] = {
    {true, 1, {0x80}},
    {true, 3, {0x81, 0x00, 0x7F}},
    {true, 4, {0x81, 0x00, 0xCC, 0x80}},
    {true, 4, {0x81, 0x00, 0xD0, 0x80}},
    {true, 5, {0x81, 0x00, 0x91, 0x91, 0x01}},
    {true, 7, {0x81, 0x00, 0xD2, 0x80, 0, 0, 0}},
    {false, 0, {0}},
    {false, 1, {0x90}},                         /* no map */
    {false, 2, {0x80, 0x00}},                   /* something behind it */
    {false, 4, {0x81, 0x00, 0xCC, 0x7F}},       /* not the shortest */
    {false, 4, {0x81, 0x00, 0xD0, 0xE0}},       /* -32 has a shorter form */
    {false, 4, {0x81, 0x00, 0xD0, 0x05}},       /* non-negative in a signed form */
    {false, 5, {0x82, 0x01, 0x00, 0x01, 0x00}}, /* key twice */
    {false, 5, {0x82, 0x02, 0x00, 0x01, 0x00}}, /* keys descend */
    {false, 4, {0x81, 0xCC, 0x80, 0x00}},       /* key above 127 */
    {false, 3, {0x81, 0xFF, 0x00}},             /* key below 0 */
    {false, 3, {0x81, 0x00, 0xC0}},             /* nil */
    {false, 3, {0x81, 0x00, 0xC1}},
    {false, 7, {0x81, 0x00, 0xCA, 0, 0, 0, 0}},             /* float */
    {false, 5, {0x81, 0x00, 0xD4, 0x01, 0x00}},             /* extension */
    {false, 4, {0x81, 0x00, 0xA1, 0x1F}},                   /* not printable */
    {false, 4, {0x81, 0x00, 0xD9, 0x00}},                   /* empty string, long form */
    {false, 3, {0x81, 0x00, 0x9F}},                         /* claims more than there is */
    {false, 5, {0x81, 0x00, 0xDC, 0x00, 0x01}},             /* list, long form */
    {false, 6, {0x81, 0x00, 0x91, 0x91, 0x91, 0x01}},       /* four levels */
    {false, 6, {0x81, 0x00, 0x82, 0x01, 0x00, 0x01}},       /* inner key twice, cut short */
    {false, 7, {0x81, 0x00, 0x82, 0x01, 0x00, 0x01, 0x00}}, /* inner key twice */
};

static void check_bodies(void)
{
    struct pb_body body;
    for (size_t i = 0; i < sizeof BODIES / sizeof BODIES[0]; i++) {
        char what[32];
        snprintf(what, sizeof what, "body %u", (unsigned)i);
        check(pb_body_read(&body, BODIES[i].bytes, BODIES[i].size) == BODIES[i].is_sound, what);
    }
}

/* ------------------------------------------------------------------------------------------------ an exchange */

struct heard {
    struct port_storage storage;
    size_t size; /* of the last frame, unstuffed */
    uint8_t frame[PB_STUFFED_SIZE_MAX];
    unsigned frames;
};

static bool hear(void *context, const uint8_t *bytes, size_t size)
{
    struct heard *heard = context;
    const size_t begin = bytes[0] == PB_DELIMITER ? 1 : 0;
    memcpy(heard->frame, bytes + begin, size - begin - 1);
    heard->frames++;
    return pb_cobs_decode(heard->frame, size - begin - 1, &heard->size);
}

static bool load(void *context, unsigned slot, uint8_t *record)
{
    return port_storage_read(&((struct heard *)context)->storage, slot, record);
}

static bool save(void *context, unsigned slot, const uint8_t *record)
{
    return port_storage_write(&((struct heard *)context)->storage, slot, record);
}

/* Sends a request whose body has up to four integers under ascending keys (key -1 ends the list). */
static void ask(struct pb_module *module, uint64_t now_us, uint8_t kind, uint32_t number, const int64_t (*pairs)[2])
{
    uint8_t frame[PB_FRAME_SIZE_MAX];
    uint8_t unit[PB_STUFFED_SIZE_MAX + 1];
    struct pb_writer body;
    unsigned count = 0;
    while (pairs[count][0] >= 0)
        count++;
    pb_write_begin(&body, frame + PB_HEADER_SIZE, PB_BODY_SIZE_MAX);
    pb_write_map(&body, count);
    for (unsigned i = 0; i < count; i++)
        pb_write_field(&body, (uint8_t)pairs[i][0], pairs[i][1]);
    const struct pb_header header = {PB_VERSION, kind, 0, 0, CONTROLLER, MODULE, SESSION, number};
    const size_t size = pb_cobs_encode(frame, pb_frame_finish(frame, &header, body.size), unit);
    unit[size] = PB_DELIMITER;
    pb_module_feed(module, now_us, unit, size + 1);
    pb_module_advance(module, now_us + 5000);
}

/* The value of an integer field of the last frame heard, -1 without one. */
static int64_t told(const struct heard *heard, uint8_t kind, uint8_t key)
{
    struct pb_body body;
    struct pb_header header;
    if (pb_frame_read(heard->frame, heard->size, &header) != 0 || header.kind != kind)
        return -1;
    if (!pb_body_read(&body, heard->frame + PB_HEADER_SIZE, header.body_length))
        return -1;
    const struct pb_value value = pb_body_value(&body, key, NULL);
    return value.type == PB_TYPE_INTEGER ? value.integer : -1;
}

#define PAIRS(...) ((const int64_t[][2]){__VA_ARGS__, {-1, 0}})

static void check_exchange(void)
{
    static struct pb_module module;
    static struct heard heard;
    static struct pb_config config;
    const struct pb_port port = {&heard, hear, load, save};
    pb_default_config(&config);
    port_storage_open(&heard.storage, NULL);
    check(pb_module_init(&module, &config, &port, 1, 0, PB_RESTART_CAUSE_POWER_ON) == NULL, "configuration");
    pb_module_advance(&module, 100000);
    check(told(&heard, PB_KIND_STARTED, PB_KEY_STARTED_EPOCH) == 1, "started, epoch 1");
    ask(&module, 200000, PB_KIND_DESCRIBE, 1, &PAIRS({0, 0})[1]);
    check(told(&heard, PB_KIND_DESCRIPTION, PB_KEY_DESCRIPTION_EPOCH) == 1, "description");
    ask(&module, 300000, PB_KIND_TAKE_LEASE, 2, PAIRS({0, 1}, {1, 0}, {2, 5000}));
    check(told(&heard, PB_KIND_RECEIPT, PB_KEY_RECEIPT_LEASE) == 1, "lease 1");
    ask(&module, 400000, PB_KIND_MOVE, 3, PAIRS({0, 1}, {1, 1}, {2, PB_MOTION_SLIDE}, {3, 2500}));
    check(told(&heard, PB_KIND_RECEIPT, PB_KEY_RECEIPT_REASON) == PB_REFUSAL_HALTED, "halted after the start");
    ask(&module, 500000, PB_KIND_RESET, 4, PAIRS({0, 1}, {1, 1}, {2, 1}));
    check(told(&heard, PB_KIND_RECEIPT, PB_KEY_RECEIPT_RESULT) == PB_RESULT_ACCEPTED, "reset");
    ask(&module, 600000, PB_KIND_ENERGIZE, 5, PAIRS({0, 1}, {1, 1}));
    check(told(&heard, PB_KIND_RECEIPT, PB_KEY_RECEIPT_RESULT) == PB_RESULT_ACCEPTED, "energize");
    ask(&module, 700000, PB_KIND_MOVE, 6, PAIRS({0, 1}, {1, 1}, {2, PB_MOTION_SLIDE}, {3, 2500}));
    check(told(&heard, PB_KIND_RECEIPT, PB_KEY_RECEIPT_RESULT) == PB_RESULT_ACCEPTED, "move");
    pb_module_advance(&module, 850000);
    check(told(&heard, PB_KIND_OUTCOME, PB_KEY_OUTCOME_OUTCOME) == PB_OUTCOME_DONE, "done");
    check(told(&heard, PB_KIND_OUTCOME, PB_KEY_OUTCOME_DISPLACEMENT) == 2500, "displacement");
    heard.frames = 0;
    ask(&module, 860000, PB_KIND_CONFIRM, 7, PAIRS({0, 1}, {1, 1}));
    pb_module_advance(&module, 4000000);
    check(heard.frames == 0, "no repeats after the confirm");
    ask(&module, 4100000, PB_KIND_HALT, 8, &PAIRS({0, 0})[1]);
    check(told(&heard, PB_KIND_HALT_RECEIPT, PB_KEY_HALT_RECEIPT_HALT_COUNT) == 2, "halt");
}

int main(void)
{
    check_crc();
    check_cobs();
    check_bodies();
    check_exchange();
    printf("%u failed\n", failures);
    return failures == 0 ? 0 : 1;
}
