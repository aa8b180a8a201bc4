/* The emulated board as a program: on a pseudo-terminal in real time, or in lockstep with a host that grants it time.
 *
 * Linked with simavr: as a whole under the GPL, version 3 or later; see chip.h. */
#define _DEFAULT_SOURCE
#define _XOPEN_SOURCE 700
#include "board.h"

#include <errno.h>
#include <fcntl.h>
#include <poll.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <termios.h>
#include <time.h>
#include <unistd.h>

#define PACE_US 250u /* slice of the paced mode: how late a byte may be */
#define SLICE_MAX_US 10000u
#define LAG_MAX_US 1000000u /* what was held up longer lets the lost time go, instead of racing after it */
#define COMMAND_BYTES 200u
#define LINE_BYTES 128
#define FRAME_BYTES 65535u

static const char usage[] =
    "usage: ramprig-emu PROGRAM.elf [options]\n"
    "  --lockstep         frames of ramprig's lockstep port on stdin and stdout (and commands: see README.md)\n"
    "  --lockstep-pty     the same on a pseudo-terminal, whose name is printed\n"
    "  --pty              (default) the serial line on a pseudo-terminal, in real time; commands as lines on stdin\n"
    "  --eeprom FILE      the EEPROM's content at the start\n"
    "  --cause CAUSE      power (default), external, brownout or watchdog\n"
    "  --plant FILE       names and values of the plant, one in each line; else the vent drive's\n"
    "  --seed NUMBER      of the sensors' noise\n";

struct options {
    const char *elf;
    const char *eeprom;
    const char *cause;
    const char *plant;
    uint64_t seed;
    enum { PTY, LOCKSTEP, LOCKSTEP_PTY } mode;
};

static struct board board;

static bool read_options(int count, char **words, struct options *options)
{
    options->cause = "power";
    for (int i = 1; i < count; i++) {
        const char *word = words[i];
        const char *value = i + 1 < count ? words[i + 1] : NULL;
        if (strcmp(word, "--lockstep") == 0) {
            options->mode = LOCKSTEP;
        } else if (strcmp(word, "--lockstep-pty") == 0) {
            options->mode = LOCKSTEP_PTY;
        } else if (strcmp(word, "--pty") == 0) {
            options->mode = PTY;
        } else if (strcmp(word, "--eeprom") == 0 && value != NULL) {
            options->eeprom = words[++i];
        } else if (strcmp(word, "--cause") == 0 && value != NULL) {
            options->cause = words[++i];
        } else if (strcmp(word, "--plant") == 0 && value != NULL) {
            options->plant = words[++i];
        } else if (strcmp(word, "--seed") == 0 && value != NULL) {
            options->seed = strtoull(words[++i], NULL, 10);
        } else if (word[0] != '-' && options->elf == NULL) {
            options->elf = word;
        } else {
            return false;
        }
    }
    return options->elf != NULL;
}

/* Lines of a name and a value, as `ramprig-core` takes them. */
static bool read_plant(struct plant_parameters *parameters, const char *path)
{
    FILE *file = fopen(path, "r");
    char line[LINE_BYTES];
    char name[LINE_BYTES];
    double value;
    unsigned number = 0;
    bool right = true;
    if (file == NULL) {
        fprintf(stderr, "emu: %s: %s\n", path, strerror(errno));
        return false;
    }
    while (right && fgets(line, sizeof line, file) != NULL) {
        number++;
        right = sscanf(line, "%127s %lf", name, &value) == 2 && plant_parameters_set(parameters, name, value);
    }
    fclose(file);
    if (!right) {
        fprintf(stderr, "emu: %s:%u: this is no parameter of the plant with a value it can have\n", path, number);
    }
    return right;
}

static bool start_board(const struct options *options)
{
    static uint8_t eeprom[1024];
    struct plant_parameters plant;
    plant_parameters_vent(&plant);
    if (options->plant != NULL && !read_plant(&plant, options->plant)) {
        return false;
    }
    memset(eeprom, 0xFF, sizeof eeprom);
    if (options->eeprom != NULL) {
        FILE *file = fopen(options->eeprom, "rb");
        if (file == NULL || fread(eeprom, 1, sizeof eeprom, file) == 0) {
            fprintf(stderr, "emu: %s cannot be read: %s\n", options->eeprom, strerror(errno));
            return false;
        }
        fclose(file);
    }
    uint8_t flags = board_reset_flags(options->cause);
    if (flags == 0) {
        fprintf(stderr, "emu: no reset has the cause %s\n", options->cause);
        return false;
    }
    return board_begin(&board, options->elf, eeprom, sizeof eeprom, flags, &plant, options->seed);
}

/* ---- bytes in and out, whole or not at all ---- */

static bool read_whole(int fd, void *bytes, size_t count)
{
    uint8_t *next = bytes;
    while (count > 0) {
        ssize_t got = read(fd, next, count);
        if (got < 0 && errno == EINTR) {
            continue;
        }
        if (got <= 0) {
            return false;
        }
        next += got;
        count -= (size_t)got;
    }
    return true;
}

static bool write_whole(int fd, const void *bytes, size_t count)
{
    const uint8_t *next = bytes;
    while (count > 0) {
        ssize_t put = write(fd, next, count);
        if (put < 0 && errno == EINTR) {
            continue;
        }
        if (put <= 0) {
            return false;
        }
        next += put;
        count -= (size_t)put;
    }
    return true;
}

static int open_pty(void)
{
    int fd = posix_openpt(O_RDWR | O_NOCTTY);
    if (fd < 0 || grantpt(fd) != 0 || unlockpt(fd) != 0) {
        return -1;
    }
    int far_end = open(ptsname(fd), O_RDWR | O_NOCTTY); /* held open, or reads fail whenever no host is there */
    struct termios raw;
    if (far_end < 0 || tcgetattr(far_end, &raw) != 0) {
        return -1;
    }
    cfmakeraw(&raw);
    (void)tcsetattr(far_end, TCSANOW, &raw);
    printf("%s\n", ptsname(fd));
    fflush(stdout);
    return fd;
}

/* ---- lockstep: ramprig.port.lockstep's grants and replies; and `C` u16 n, n bytes of a command, answered by `P` u16 n ---- */

static void put_number(uint8_t *at, uint64_t value, size_t bytes)
{
    for (size_t i = 0; i < bytes; i++) {
        at[i] = (uint8_t)(value >> (8 * i));
    }
}

static bool answer_grant(int in, int out)
{
    uint8_t head[6];
    static uint8_t bytes[FRAME_BYTES];
    static uint8_t reply[11 + FRAME_BYTES];
    if (!read_whole(in, head, sizeof head)) {
        return false;
    }
    uint32_t advance_us = head[0] | (uint32_t)head[1] << 8 | (uint32_t)head[2] << 16 | (uint32_t)head[3] << 24;
    uint32_t count = head[4] | (uint32_t)head[5] << 8;
    if (!read_whole(in, bytes, count) || !wire_put(&board.wire, bytes, count)) {
        return false;
    }
    board_run(&board, advance_us, true);
    uint32_t sent = board.wire.sent < FRAME_BYTES ? board.wire.sent : FRAME_BYTES;
    reply[0] = 'B';
    put_number(reply + 1, board.now_us, 8);
    put_number(reply + 9, sent, 2);
    memcpy(reply + 11, board.wire.from_chip, sent);
    board.wire.sent = 0;
    board.wire.line_ended = false;
    return write_whole(out, reply, 11u + sent);
}

static bool answer_command(int in, int out)
{
    uint8_t head[2];
    char command[COMMAND_BYTES + 1];
    char answer[512];
    if (!read_whole(in, head, sizeof head)) {
        return false;
    }
    size_t count = (size_t)(head[0] | head[1] << 8);
    if (count > COMMAND_BYTES || !read_whole(in, command, count)) {
        return false;
    }
    command[count] = '\0';
    board_command(&board, command, answer, sizeof answer);
    uint8_t reply[3 + sizeof answer];
    size_t length = strlen(answer);
    reply[0] = 'P';
    put_number(reply + 1, length, 2);
    memcpy(reply + 3, answer, length);
    return write_whole(out, reply, 3 + length);
}

static int run_lockstep(int in, int out)
{
    uint8_t mark;
    while (read_whole(in, &mark, 1)) {
        if (mark == 'A' ? !answer_grant(in, out) : mark == 'C' ? !answer_command(in, out) : true) {
            fprintf(stderr, "emu: the frames are out of step\n");
            return 1;
        }
        if (board.chip.crashed) {
            fprintf(stderr, "emu: the program has crashed\n");
            return 1;
        }
    }
    return 0;
}

/* ---- in real time ---- */

static uint64_t now_us(void)
{
    struct timespec now;
    clock_gettime(CLOCK_MONOTONIC, &now);
    return (uint64_t)now.tv_sec * 1000000u + (uint64_t)now.tv_nsec / 1000u;
}

/* Commands from stdin, a line each; false at its end. */
static bool take_commands(void)
{
    char command[COMMAND_BYTES + 1];
    char answer[512];
    if (fgets(command, sizeof command, stdin) == NULL) {
        return false;
    }
    command[strcspn(command, "\n")] = '\0';
    board_command(&board, command, answer, sizeof answer);
    printf("%s\n", answer);
    fflush(stdout);
    return true;
}

/* What a host does not take is lost as on a wire: a board does not stand still for it. */
static void send_on(int fd)
{
    if (board.wire.sent != 0 && write(fd, board.wire.from_chip, board.wire.sent) < 0 && errno != EAGAIN && errno != EINTR) {
        fprintf(stderr, "emu: the pseudo-terminal takes nothing: %s\n", strerror(errno));
    }
    board.wire.sent = 0;
    board.wire.line_ended = false;
}

static int run_paced(int fd)
{
    uint64_t start_us = now_us();
    bool commands = true;
    (void)fcntl(fd, F_SETFL, O_NONBLOCK);
    (void)setvbuf(stdin, NULL, _IONBF, 0); /* or a second command would wait, read and not seen, for a third */
    while (!board.chip.crashed) {
        struct pollfd waits[2] = {{fd, POLLIN, 0}, {commands ? STDIN_FILENO : -1, POLLIN, 0}};
        struct timespec pause = {0, (long)PACE_US * 1000L};
        if (poll(waits, 2, 0) > 0) {
            uint8_t bytes[4096];
            ssize_t got = (waits[0].revents & POLLIN) != 0 ? read(fd, bytes, sizeof bytes) : 0;
            if (got > 0 && !wire_put(&board.wire, bytes, (uint32_t)got)) {
                fprintf(stderr, "emu: the host sends faster than the line can carry; %zd bytes are lost\n", got);
            }
            if ((waits[1].revents & (POLLIN | POLLHUP)) != 0) {
                commands = take_commands();
            }
        }
        uint64_t due_us = now_us() - start_us;
        uint64_t behind_us = due_us > board.now_us ? due_us - board.now_us : 0;
        if (behind_us > LAG_MAX_US) {
            start_us += behind_us - LAG_MAX_US;
            behind_us = LAG_MAX_US;
        }
        if (behind_us != 0) {
            board_run(&board, behind_us < SLICE_MAX_US ? (uint32_t)behind_us : SLICE_MAX_US, false);
        } else {
            nanosleep(&pause, NULL);
        }
        send_on(fd);
    }
    fprintf(stderr, "emu: the program has crashed\n");
    return 1;
}

int main(int count, char **words)
{
    struct options options = {0};
    if (!read_options(count, words, &options)) {
        fputs(usage, stderr);
        return 2;
    }
    if (!start_board(&options)) {
        return 2;
    }
    if (options.mode == LOCKSTEP) {
        return run_lockstep(STDIN_FILENO, STDOUT_FILENO);
    }
    int fd = open_pty();
    if (fd < 0) {
        fprintf(stderr, "emu: no pseudo-terminal: %s\n", strerror(errno));
        return 2;
    }
    return options.mode == LOCKSTEP_PTY ? run_lockstep(fd, fd) : run_paced(fd);
}
