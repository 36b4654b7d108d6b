/* A module behind a TCP port, in real time. One client at a time; the next one is taken when it has left. */
#include <arpa/inet.h>
#include <errno.h>
#include <fcntl.h>
#include <netinet/in.h>
#include <netinet/tcp.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/socket.h>
#include <unistd.h>

#include "host.h"

static const uint64_t NO_LIMIT_US = 1000000u;

static void give_up(const struct host *host, const char *what)
{
    fprintf(stderr, "%s: %s %s:%u: %s\n", host->options.program, what, host->options.bind_address,
            (unsigned)host->options.port, strerror(errno));
    exit(1);
}

static int listen_for_clients(const struct host *host)
{
    struct sockaddr_in address;
    socklen_t size = sizeof address;
    const int yes = 1;
    memset(&address, 0, sizeof address);
    address.sin_family = AF_INET;
    address.sin_port = htons(host->options.port);
    if (inet_pton(AF_INET, host->options.bind_address, &address.sin_addr) != 1) {
        fprintf(stderr, "%s: --bind %s: an IPv4 address is needed\n", host->options.program,
                host->options.bind_address);
        exit(2);
    }
    const int listener = socket(AF_INET, SOCK_STREAM, 0);
    if (listener < 0)
        give_up(host, "socket for");
    setsockopt(listener, SOL_SOCKET, SO_REUSEADDR, &yes, sizeof yes);
    if (bind(listener, (struct sockaddr *)&address, sizeof address) != 0 || listen(listener, 4) != 0)
        give_up(host, "listening on");
    if (getsockname(listener, (struct sockaddr *)&address, &size) != 0)
        give_up(host, "address of");
    fprintf(stderr, "listening on %s:%u\n", host->options.bind_address, (unsigned)ntohs(address.sin_port));
    return listener;
}

/* Frames are small and wanted at once, so nothing waits to be joined with more. */
static int accept_client(int listener)
{
    const int yes = 1;
    const int client = accept(listener, NULL, NULL);
    if (client < 0)
        return -1;
    setsockopt(client, IPPROTO_TCP, TCP_NODELAY, &yes, sizeof yes);
    fcntl(client, F_SETFL, fcntl(client, F_GETFL) | O_NONBLOCK);
    return client;
}

int main(int argc, char **argv)
{
    static struct host host;
    bool failed;
    int client = -1;
    host_start(&host, argc, argv, "An emulated module behind a TCP port.", true);
    const int listener = listen_for_clients(&host);
    while (!host_is_stopped()) {
        const bool is_ready = host_wait(&host, client >= 0 ? client : listener, client, NO_LIMIT_US);
        bool is_gone = false;
        if (is_ready && client < 0) {
            client = accept_client(listener);
            if (client >= 0)
                host_connect(&host, true);
        } else if (is_ready) {
            is_gone = !host_receive(&host, client, &failed);
        }
        is_gone = !host_work(&host, client) || is_gone;
        if (is_gone && client >= 0) {
            close(client);
            client = -1;
            host_connect(&host, false);
        }
    }
    return 0;
}
