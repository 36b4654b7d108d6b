/* A module in virtual time: time and bytes come in records, the output and the next deadline go back. */
#include <signal.h>
#include <stdio.h>
#include <string.h>

#include "bytes.h"
#include "setup.h"

enum { HEAD_SIZE = 11, OUTPUT_SIZE = 1 << 20, OPERATION_FEED = 1, OPERATION_ADVANCE = 2 };

struct bench {
    struct options options;
    struct pb_config config;
    struct port_storage storage;
    struct pb_module module;
    bool is_powered;
    size_t used;
    uint8_t reply[4 + OUTPUT_SIZE + 8];
};

static bool take_output(void *context, const uint8_t *bytes, size_t size)
{
    struct bench *bench = context;
    if (size > OUTPUT_SIZE - bench->used)
        return false;
    memcpy(bench->reply + 4 + bench->used, bytes, size);
    bench->used += size;
    return true;
}

static bool read_storage(void *context, unsigned slot, uint8_t *record)
{
    return port_storage_read(&((struct bench *)context)->storage, slot, record);
}

static bool write_storage(void *context, unsigned slot, const uint8_t *record)
{
    return port_storage_write(&((struct bench *)context)->storage, slot, record);
}

/* The first record's time is that of the power-up. */
static void power_up(struct bench *bench, uint64_t now_us)
{
    const struct pb_port port = {bench, take_output, read_storage, write_storage};
    if (!bench->is_powered)
        setup_module(&bench->options, &bench->config, &bench->storage, &bench->module, &port, now_us);
    bench->is_powered = true;
}

static bool send_reply(struct bench *bench)
{
    const size_t size = 4 + bench->used + 8;
    pb_put(bench->reply, 4, bench->used);
    pb_put(bench->reply + 4 + bench->used, 8, pb_module_deadline(&bench->module));
    return fwrite(bench->reply, 1, size, stdout) == size && fflush(stdout) == 0;
}

static void end_quietly(int signal_number)
{
    (void)signal_number; /* the read that waits ends, and with it the program */
}

static void catch_signals(void)
{
    struct sigaction action;
    memset(&action, 0, sizeof action);
    action.sa_handler = end_quietly;
    sigaction(SIGINT, &action, NULL);
    sigaction(SIGTERM, &action, NULL);
}

int main(int argc, char **argv)
{
    static struct bench bench;
    static uint8_t data[UINT16_MAX];
    uint8_t head[HEAD_SIZE];
    options_read(&bench.options, argc, argv,
                 "An emulated module in virtual time; records on standard input, replies on standard output.", false);
    catch_signals();
    while (fread(head, 1, sizeof head, stdin) == sizeof head) {
        const uint64_t now_us = pb_get(head + 1, 8);
        const size_t size = (size_t)pb_get(head + 9, 2);
        if (fread(data, 1, size, stdin) != size)
            break;
        if (head[0] != OPERATION_FEED && head[0] != OPERATION_ADVANCE) {
            fprintf(stderr, "%s: operation %u: 1 (feed) or 2 (advance) is needed\n", bench.options.program, head[0]);
            return 1;
        }
        power_up(&bench, now_us);
        bench.used = 0;
        pb_module_link_ready(&bench.module);
        if (head[0] == OPERATION_FEED)
            pb_module_feed(&bench.module, now_us, data, size);
        else
            pb_module_advance(&bench.module, now_us);
        if (!send_reply(&bench))
            return 1;
    }
    return 0;
}
