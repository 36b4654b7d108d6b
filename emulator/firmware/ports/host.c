#include "host.h"

#include <errno.h>
#include <signal.h>
#include <stdarg.h>
#include <stdio.h>
#include <string.h>
#include <sys/select.h>
#include <time.h>
#include <unistd.h>

#include "setup.h"

static volatile sig_atomic_t stopped;
static sigset_t signals_while_waiting;

static void stop(int signal_number)
{
    (void)signal_number;
    stopped = 1;
}

bool host_is_stopped(void)
{
    return stopped != 0;
}

/* The two signals are let through only while waiting, so that none is missed between a check and the wait. */
static void catch_signals(void)
{
    struct sigaction action;
    sigset_t blocked;
    memset(&action, 0, sizeof action);
    action.sa_handler = stop;
    sigaction(SIGINT, &action, NULL);
    sigaction(SIGTERM, &action, NULL);
    action.sa_handler = SIG_IGN;
    sigaction(SIGPIPE, &action, NULL);
    sigemptyset(&blocked);
    sigaddset(&blocked, SIGINT);
    sigaddset(&blocked, SIGTERM);
    sigprocmask(SIG_BLOCK, &blocked, &signals_while_waiting);
}

static uint64_t now_us(void)
{
    struct timespec now;
    clock_gettime(CLOCK_MONOTONIC, &now);
    return (uint64_t)now.tv_sec * 1000000u + (uint64_t)now.tv_nsec / 1000u;
}

static bool take_output(void *context, const uint8_t *bytes, size_t size)
{
    struct host *host = context;
    if (!host->connected)
        return true;
    if (size > sizeof host->output - host->used)
        return false;
    memcpy(host->output + host->used, bytes, size);
    host->used += size;
    return true;
}

static bool read_storage(void *context, unsigned slot, uint8_t *record)
{
    return port_storage_read(&((struct host *)context)->storage, slot, record);
}

static bool write_storage(void *context, unsigned slot, const uint8_t *record)
{
    return port_storage_write(&((struct host *)context)->storage, slot, record);
}

void host_start(struct host *host, int argc, char **argv, const char *purpose, bool takes_port)
{
    const struct pb_port port = {host, take_output, read_storage, write_storage};
    options_read(&host->options, argc, argv, purpose, takes_port);
    catch_signals();
    setup_module(&host->options, &host->config, &host->storage, &host->module, &port, now_us());
    host_log(host, "module %lu up, epoch %lu, seed %llu", (unsigned long)host->module.address,
             (unsigned long)host->module.epoch, (unsigned long long)host->options.seed);
}

static struct timespec time_until(struct host *host, uint64_t limit_us)
{
    const uint64_t now = now_us();
    const uint64_t deadline_us = pb_module_deadline(&host->module);
    uint64_t wait_us = deadline_us <= now ? 0 : deadline_us - now;
    if (wait_us > limit_us)
        wait_us = limit_us;
    struct timespec wait;
    wait.tv_sec = (time_t)(wait_us / 1000000u);
    wait.tv_nsec = (long)(wait_us % 1000000u) * 1000L;
    return wait;
}

bool host_wait(struct host *host, int input, int output, uint64_t limit_us)
{
    fd_set readable;
    fd_set writable;
    const bool has_output = output >= 0 && host->used > 0;
    const struct timespec wait = time_until(host, limit_us);
    FD_ZERO(&readable);
    FD_ZERO(&writable);
    if (input >= 0)
        FD_SET(input, &readable);
    if (has_output)
        FD_SET(output, &writable);
    const int highest = has_output && output > input ? output : input;
    const int ready = pselect(highest + 1, &readable, &writable, NULL, &wait, &signals_while_waiting);
    return ready > 0 && input >= 0 && FD_ISSET(input, &readable);
}

void host_feed(struct host *host, const uint8_t *bytes, size_t size)
{
    host_log(host, "received %lu bytes", (unsigned long)size);
    pb_module_feed(&host->module, now_us(), bytes, size);
}

bool host_receive(struct host *host, int input, bool *failed)
{
    uint8_t bytes[4096];
    const ssize_t size = read(input, bytes, sizeof bytes);
    *failed = size < 0;
    if (size < 0 && (errno == EAGAIN || errno == EINTR))
        return true;
    if (size <= 0)
        return false;
    host_feed(host, bytes, (size_t)size);
    return true;
}

/* False: the other side is gone. */
static bool flush_output(struct host *host, int output)
{
    while (host->used > 0) {
        const ssize_t size = write(output, host->output, host->used);
        if (size < 0)
            return errno == EAGAIN || errno == EINTR;
        host_log(host, "sent %ld bytes", (long)size);
        host->used -= (size_t)size;
        memmove(host->output, host->output + size, host->used);
        pb_module_link_ready(&host->module);
    }
    return true;
}

bool host_work(struct host *host, int output)
{
    pb_module_advance(&host->module, now_us());
    return output < 0 || flush_output(host, output);
}

void host_connect(struct host *host, bool connected)
{
    host->connected = connected;
    host->used = 0;
    pb_module_link_ready(&host->module);
    pb_module_link_lost(&host->module);
    host_log(host, connected ? "peer connected" : "peer gone");
}

void host_finish(struct host *host, int output)
{
    const uint64_t end_us = now_us() + 1000u * (uint64_t)host->config.receipt_ms;
    while (!host_is_stopped() && now_us() < end_us) {
        host_wait(host, -1, output, end_us - now_us());
        if (!host_work(host, output))
            return;
    }
}

void host_log(const struct host *host, const char *format, ...)
{
    va_list arguments;
    if (!host->options.verbose)
        return;
    va_start(arguments, format);
    fprintf(stderr, "%s: ", host->options.program);
    vfprintf(stderr, format, arguments);
    fputc('\n', stderr);
    va_end(arguments);
}
