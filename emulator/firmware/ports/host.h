/* One module on this machine in real time: clock, waiting, input and output. */
#ifndef PB_HOST_H
#define PB_HOST_H

#include <stdbool.h>
#include <stdint.h>

#include "module.h"
#include "options.h"
#include "storage.h"

#define HOST_OUTPUT_SIZE 65536

struct host {
    struct options options;
    struct pb_config config;
    struct port_storage storage;
    struct pb_module module;
    bool connected; /* somebody may hear what is sent; else it is lost, as on any open line */
    size_t used;
    uint8_t output[HOST_OUTPUT_SIZE];
};

/* Reads options, sets up signals, powers the module up. Exits where that is due. */
void host_start(struct host *host, int argc, char **argv, const char *purpose, bool takes_port);

/* SIGINT or SIGTERM has come. */
bool host_is_stopped(void);

/* Waits for input on `input` (-1: none), room on `output` if something waits for it, the module's deadline, or at
 * most limit_us. True: `input` can be read. Does what is due. */
bool host_wait(struct host *host, int input, int output, uint64_t limit_us);

/* Bytes that have just arrived. */
void host_feed(struct host *host, const uint8_t *bytes, size_t size);

/* Reads what has arrived and gives it to the module. False: the other side is gone (`*failed`: in an error). */
bool host_receive(struct host *host, int input, bool *failed);

/* Does what is due and sends what can be sent. False: the other side is gone. */
bool host_work(struct host *host, int output);

/* A peer has come, or gone. */
void host_connect(struct host *host, bool connected);

/* After the end of the input: gives the answers that are under way the time the module declares for them. */
void host_finish(struct host *host, int output);

void host_log(const struct host *host, const char *format, ...);

#endif
