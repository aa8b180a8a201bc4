/* Where the board meets its host; see endpoint.h. */
#define _XOPEN_SOURCE 700
#include "endpoint.h"

#include <errno.h>
#include <fcntl.h>
#include <netdb.h>
#include <netinet/in.h>
#include <netinet/tcp.h>
#include <poll.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/socket.h>
#include <termios.h>
#include <unistd.h>

#define WRITE_WAIT_MS 5000

static bool fails(const char *what)
{
    fprintf(stderr, "ramprig-core: %s: %s\n", what, strerror(errno));
    return false;
}

static void set_unblocking(int file)
{
    (void)fcntl(file, F_SETFL, fcntl(file, F_GETFL) | O_NONBLOCK);
}

/* No echo, no line editing, all eight bits. */
static bool make_raw(const char *name)
{
    int terminal = open(name, O_RDWR | O_NOCTTY);
    struct termios settings;
    if (terminal < 0 || tcgetattr(terminal, &settings) != 0) {
        return fails(name);
    }
    settings.c_iflag &= ~(tcflag_t)(BRKINT | ICRNL | INPCK | ISTRIP | IXON);
    settings.c_oflag &= ~(tcflag_t)OPOST;
    settings.c_lflag &= ~(tcflag_t)(ECHO | ICANON | IEXTEN | ISIG);
    settings.c_cflag |= CS8;
    bool done = tcsetattr(terminal, TCSANOW, &settings) == 0;
    close(terminal);
    return done || fails(name);
}

static bool make_link(const struct endpoint *endpoint, const char *terminal)
{
    char fresh[ENDPOINT_NAME + 8];
    snprintf(fresh, sizeof fresh, "%s.new", endpoint->link);
    (void)unlink(fresh);
    return (symlink(terminal, fresh) == 0 && rename(fresh, endpoint->link) == 0) || fails(endpoint->link);
}

bool endpoint_open_terminal(struct endpoint *endpoint, const char *link)
{
    *endpoint = (struct endpoint){.listener = -1, .link = link};
    endpoint->host = posix_openpt(O_RDWR | O_NOCTTY);
    const char *terminal = NULL;
    if (endpoint->host < 0 || grantpt(endpoint->host) != 0 || unlockpt(endpoint->host) != 0 ||
        (terminal = ptsname(endpoint->host)) == NULL) {
        return fails("no pseudo-terminal");
    }
    snprintf(endpoint->name, sizeof endpoint->name, "%s", link != NULL ? link : terminal);
    set_unblocking(endpoint->host);
    return make_raw(terminal) && (link == NULL || make_link(endpoint, terminal));
}

bool endpoint_open_tcp(struct endpoint *endpoint, const char *address)
{
    *endpoint = (struct endpoint){.listener = -1, .host = -1};
    char host[ENDPOINT_NAME / 2] = "127.0.0.1";
    const char *colon = strrchr(address, ':');
    if (colon != NULL) {
        snprintf(host, sizeof host, "%.*s", (int)(colon - address), address);
    }
    const char *port = colon != NULL ? colon + 1 : address;
    char *end;
    unsigned long number = strtoul(port, &end, 10);
    struct addrinfo *found = NULL;
    struct addrinfo wanted = {.ai_family = AF_INET, .ai_socktype = SOCK_STREAM, .ai_flags = AI_PASSIVE};
    if (port[0] < '0' || port[0] > '9' || *end != '\0' || number > 65535 || /* which some systems take modulo 65536 */
        getaddrinfo(host, port, &wanted, &found) != 0 || found == NULL) {
        fprintf(stderr, "ramprig-core: %s is no address; write PORT or HOST:PORT\n", address);
        return false;
    }
    int yes = 1;
    endpoint->listener = socket(found->ai_family, found->ai_socktype, found->ai_protocol);
    bool done = endpoint->listener >= 0 &&
                setsockopt(endpoint->listener, SOL_SOCKET, SO_REUSEADDR, &yes, sizeof yes) == 0 &&
                bind(endpoint->listener, found->ai_addr, found->ai_addrlen) == 0 && listen(endpoint->listener, 4) == 0;
    freeaddrinfo(found);
    struct sockaddr_in taken;
    socklen_t length = sizeof taken;
    if (!done || getsockname(endpoint->listener, (struct sockaddr *)&taken, &length) != 0) {
        return fails(address);
    }
    snprintf(endpoint->name, sizeof endpoint->name, "socket://%s:%u", host, (unsigned)ntohs(taken.sin_port));
    set_unblocking(endpoint->listener);
    return true;
}

/* Takes a waiting host, or turns it away where there is one; true where one was taken. */
static bool take_host(struct endpoint *endpoint)
{
    int host = accept(endpoint->listener, NULL, NULL);
    if (host < 0) {
        return false;
    }
    if (endpoint->host >= 0) {
        close(host);
        return false;
    }
    int yes = 1;
    (void)setsockopt(host, IPPROTO_TCP, TCP_NODELAY, &yes, sizeof yes);
    set_unblocking(host);
    endpoint->host = host;
    return true;
}

static void drop_host(struct endpoint *endpoint)
{
    endpoint->here = false;
    if (endpoint->listener >= 0 && endpoint->host >= 0) {
        close(endpoint->host);
        endpoint->host = -1;
    }
}

/* The terminal's end tells by POLLHUP that nobody has it open. */
static bool somebody_is_here(struct endpoint *endpoint, short events, bool *came)
{
    bool here = (events & POLLHUP) == 0 || (events & POLLIN) != 0;
    *came = here && !endpoint->here;
    endpoint->here = here;
    return here;
}

size_t endpoint_read(struct endpoint *endpoint, uint8_t *bytes, size_t most, int wait_ms, bool *came)
{
    *came = false;
    struct pollfd watched[2] = {{endpoint->host, POLLIN, 0}, {endpoint->listener, POLLIN, 0}};
    if (endpoint->listener < 0 && !endpoint->here) { /* a terminal that nobody has open would answer at once */
        (void)poll(watched, 1, 0);
        if (!somebody_is_here(endpoint, watched[0].revents, came)) {
            (void)poll(NULL, 0, wait_ms);
            return 0;
        }
    }
    (void)poll(watched, 2, wait_ms);
    ssize_t got = 0;
    if (endpoint->host >= 0 && watched[0].revents != 0) {
        got = read(endpoint->host, bytes, most);
        if (got <= 0 && !(got < 0 && (errno == EAGAIN || errno == EINTR))) {
            drop_host(endpoint);
        }
    }
    if (endpoint->listener >= 0 && (watched[1].revents & POLLIN) != 0) { /* after the one before has been seen to go */
        *came = take_host(endpoint);
    }
    return got > 0 ? (size_t)got : 0;
}

void endpoint_write(struct endpoint *endpoint, const void *bytes, size_t length, bool all)
{
    const char *left = bytes;
    bool there = endpoint->host >= 0 && (endpoint->listener >= 0 || endpoint->here);
    while (there && length > 0) {
        ssize_t sent = write(endpoint->host, left, length);
        if (sent > 0) {
            left += sent;
            length -= (size_t)sent;
        } else if (sent < 0 && errno == EAGAIN && all) {
            struct pollfd watched = {endpoint->host, POLLOUT, 0};
            there = poll(&watched, 1, WRITE_WAIT_MS) > 0;
        } else {
            if (sent < 0 && errno != EAGAIN && errno != EINTR) {
                drop_host(endpoint);
            }
            there = false;
        }
    }
}

void endpoint_close(struct endpoint *endpoint)
{
    if (endpoint->link != NULL) {
        (void)unlink(endpoint->link);
    }
    if (endpoint->host >= 0) {
        close(endpoint->host);
    }
    if (endpoint->listener >= 0) {
        close(endpoint->listener);
    }
}
