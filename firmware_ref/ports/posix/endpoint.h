/* Where the board meets its host: a pseudo-terminal, or a TCP port on which one host at a time is taken. */
#ifndef RAMPRIG_POSIX_ENDPOINT_H
#define RAMPRIG_POSIX_ENDPOINT_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <sys/types.h>

#define ENDPOINT_NAME 160

struct endpoint {
    char name[ENDPOINT_NAME]; /* what a host opens */
    const char *link;         /* a symbolic link to the terminal, or NULL */
    int listener;             /* -1 = a terminal */
    int host;                 /* -1 = nobody is there */
    bool here;                /* a host has the terminal open */
};

/* Opens a pseudo-terminal; `link`, where not NULL, is made to point to it. False with a message on standard error. */
bool endpoint_open_terminal(struct endpoint *endpoint, const char *link);

/* Listens at `[HOST:]PORT`, PORT 0 for a free one. False with a message on standard error. */
bool endpoint_open_tcp(struct endpoint *endpoint, const char *address);

/* Waits up to `wait_ms` for bytes of the host; returns how many came. `came` tells that a new host is there. */
size_t endpoint_read(struct endpoint *endpoint, uint8_t *bytes, size_t most, int wait_ms, bool *came);

/* Hands over bytes; what a host does not take, or nobody is there to take, is lost as on a wire. With `all` it waits
 * until the host has taken them. */
void endpoint_write(struct endpoint *endpoint, const void *bytes, size_t length, bool all);

void endpoint_close(struct endpoint *endpoint);

#endif
