/* A module on standard input and output, in real time. */
#include <fcntl.h>
#include <unistd.h>

#include "host.h"

static const uint64_t NO_LIMIT_US = 1000000u;

static void make_nonblocking(int file)
{
    const int flags = fcntl(file, F_GETFL);
    if (flags >= 0)
        fcntl(file, F_SETFL, flags | O_NONBLOCK);
}

int main(int argc, char **argv)
{
    static struct host host;
    bool failed;
    host_start(&host, argc, argv, "An emulated module on standard input and output.", false);
    make_nonblocking(STDIN_FILENO);
    make_nonblocking(STDOUT_FILENO);
    host.connected = true;
    while (!host_is_stopped()) {
        if (host_wait(&host, STDIN_FILENO, STDOUT_FILENO, NO_LIMIT_US) &&
            !host_receive(&host, STDIN_FILENO, &failed)) {
            host_finish(&host, STDOUT_FILENO);
            return failed ? 1 : 0;
        }
        if (!host_work(&host, STDOUT_FILENO))
            return 0;
    }
    return 0;
}
