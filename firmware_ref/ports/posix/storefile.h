/* The board's store in a file, byte for byte, so that limits and boot number survive the program. */
#ifndef RAMPRIG_POSIX_STOREFILE_H
#define RAMPRIG_POSIX_STOREFILE_H

#include "../simulated/simulated.h"

struct storefile {
    int file;
};

/* Reads the store from the file, or makes it as erased, and has each write of the board kept there. False with a message
 * on standard error, also for a file of another board's size. */
bool storefile_open(struct storefile *storefile, struct simulated *s, const char *path);

#endif
