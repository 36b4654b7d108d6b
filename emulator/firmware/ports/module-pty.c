/* A module behind a pseudo-terminal, in real time: a serial line without the line. Clients open and close it as they
 * like; what is sent while nobody has it open is lost. */
#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <termios.h>
#include <unistd.h>

#include "host.h"

static const uint64_t NO_LIMIT_US = 1000000u;
static const uint64_t LOOK_FOR_CLIENT_US = 10000u;

static void give_up(const struct host *host, const char *what)
{
    fprintf(stderr, "%s: %s: %s\n", host->options.program, what, strerror(errno));
    exit(1);
}

static void make_raw(struct termios *terminal)
{
    terminal->c_iflag &= ~(tcflag_t)(BRKINT | ICRNL | IGNBRK | IGNCR | INLCR | INPCK | ISTRIP | IXOFF | IXON | PARMRK);
    terminal->c_oflag &= ~(tcflag_t)OPOST;
    terminal->c_lflag &= ~(tcflag_t)(ECHO | ECHONL | ICANON | IEXTEN | ISIG);
    terminal->c_cflag &= ~(tcflag_t)(CSIZE | PARENB);
    terminal->c_cflag |= CS8 | CREAD | CLOCAL;
    terminal->c_cc[VMIN] = 1;
    terminal->c_cc[VTIME] = 0;
}

/* The settings stay with the terminal while the master is open, so the first opening is ours. */
static int open_terminal(const struct host *host)
{
    struct termios settings;
    const int master = posix_openpt(O_RDWR | O_NOCTTY);
    if (master < 0 || grantpt(master) != 0 || unlockpt(master) != 0)
        give_up(host, "pseudo-terminal");
    const char *path = ptsname(master);
    if (path == NULL)
        give_up(host, "name of the pseudo-terminal");
    const int slave = open(path, O_RDWR | O_NOCTTY);
    if (slave < 0 || tcgetattr(slave, &settings) != 0)
        give_up(host, path);
    make_raw(&settings);
    if (tcsetattr(slave, TCSANOW, &settings) != 0)
        give_up(host, path);
    close(slave);
    fcntl(master, F_SETFL, fcntl(master, F_GETFL) | O_NONBLOCK);
    printf("%s\n", path);
    fflush(stdout);
    return master;
}

/* Reading fails while no client has the terminal open: then it is tried again now and then. */
static void look_for_client(struct host *host, int master)
{
    uint8_t byte;
    host_wait(host, -1, -1, LOOK_FOR_CLIENT_US);
    const ssize_t size = read(master, &byte, 1);
    if (size < 0 && errno != EAGAIN)
        return;
    host_connect(host, true);
    if (size > 0)
        host_feed(host, &byte, 1);
}

int main(int argc, char **argv)
{
    static struct host host;
    bool failed;
    host_start(&host, argc, argv, "An emulated module behind a pseudo-terminal, whose path it prints.", false);
    const int master = open_terminal(&host);
    while (!host_is_stopped()) {
        if (!host.connected) {
            look_for_client(&host, master);
            host_work(&host, -1);
            continue;
        }
        const bool is_ready = host_wait(&host, master, master, NO_LIMIT_US);
        const bool is_gone = is_ready && !host_receive(&host, master, &failed);
        if (!host_work(&host, master) || is_gone)
            host_connect(&host, false);
    }
    return 0;
}
