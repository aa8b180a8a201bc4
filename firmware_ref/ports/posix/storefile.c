/* The board's store in a file; see storefile.h. */
#define _XOPEN_SOURCE 700
#include "storefile.h"

#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

/* In the order of the board's writes and on the disk before the next, as SPEC LIMIT-4 needs it. */
static void keep(void *keeper, uint16_t offset, const void *bytes, uint16_t length)
{
    const struct storefile *storefile = keeper;
    if (pwrite(storefile->file, bytes, length, offset) != (ssize_t)length || fdatasync(storefile->file) != 0) {
        fprintf(stderr, "ramprig-core: the store could not be written: %s\n", strerror(errno));
    }
}

bool storefile_open(struct storefile *storefile, struct simulated *s, const char *path)
{
    storefile->file = open(path, O_RDWR | O_CREAT | O_CLOEXEC, 0666);
    off_t length = storefile->file < 0 ? -1 : lseek(storefile->file, 0, SEEK_END);
    bool done = length >= 0;
    if (length == 0) {
        done = pwrite(storefile->file, s->store, sizeof s->store, 0) == (ssize_t)sizeof s->store;
    } else if (length == (off_t)sizeof s->store) {
        done = pread(storefile->file, s->store, sizeof s->store, 0) == (ssize_t)sizeof s->store;
    } else if (done) {
        fprintf(stderr, "ramprig-core: %s has %ld bytes and is no store of this board, which has %zu\n", path,
                (long)length, sizeof s->store);
        return false;
    }
    if (!done) {
        fprintf(stderr, "ramprig-core: %s: %s\n", path, strerror(errno));
        return false;
    }
    s->keep = keep;
    s->keeper = storefile;
    return true;
}
