/* The core and the plant as a program: a board on a pseudo-terminal or a TCP port, in real time or in lockstep.
 *
 * The first line printed is what a host opens. It runs until SIGTERM or SIGINT. */
#define _XOPEN_SOURCE 700
#include "endpoint.h"
#include "lockstep.h"
#include "storefile.h"

#include <errno.h>
#include <math.h>
#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#define WAIT_MS      1
#define LAG_MAX_US   1000000u /* a program that was held up longer lets the lost time go, instead of racing after it */
#define READ_BYTES   4096u
#define LINE_BYTES   128
#define FAULTS_MAX   16

static const char usage[] =
    "ramprig-core: a board that runs the firmware core, with a simulated motor\n"
    "\n"
    "  --tcp [HOST:]PORT          meet the host at a TCP port (0: a free one), not at a pseudo-terminal\n"
    "  --link PATH                a symbolic link that points to the terminal\n"
    "  --lockstep                 the host grants the time (lockstep: before the port's name)\n"
    "  --plant FILE               names and values of the plant, one in each line; else the vent drive's\n"
    "  --store FILE               keeps limits and boot number\n"
    "  --seed N                   the same seed and the same doings give the same bytes\n"
    "  --baud RATE                rate of the wire, 0: takes no time (115200)\n"
    "  --board NAME --serial NAME what the board calls itself (ramprig-core, POSIX-0001)\n"
    "  --fault NAME[:AXIS][=AMOUNT]  a fault of plant or board, by the mock's names (ramprig mock --faults)\n";

struct options {
    const char *tcp;
    const char *link;
    const char *plant;
    const char *store;
    const char *board;
    const char *serial;
    const char *faults[FAULTS_MAX];
    int fault_count;
    uint64_t seed;
    uint32_t baud;
    bool lockstep;
};

static volatile sig_atomic_t stopping;

static void stop(int number)
{
    (void)number;
    stopping = 1;
}

static bool read_number(const char *text, uint64_t most, uint64_t *value)
{
    char *end;
    if (text[0] < '0' || text[0] > '9') {
        return false;
    }
    *value = strtoull(text, &end, 10);
    return *end == '\0' && *value <= most;
}

/* One option with its value; false where it means nothing. */
static bool read_option(struct options *options, const char *name, const char *value)
{
    uint64_t number = 0;
    const struct {
        const char *name;
        const char **place;
    } texts[] = {
        {"--tcp", &options->tcp},     {"--link", &options->link},   {"--plant", &options->plant},
        {"--store", &options->store}, {"--board", &options->board}, {"--serial", &options->serial},
    };
    for (size_t i = 0; i < sizeof texts / sizeof texts[0]; i++) {
        if (strcmp(name, texts[i].name) == 0) {
            *texts[i].place = value;
            return true;
        }
    }
    if (strcmp(name, "--seed") == 0) {
        return read_number(value, UINT64_MAX, &options->seed);
    }
    if (strcmp(name, "--baud") == 0 && read_number(value, 20000000u, &number)) {
        options->baud = (uint32_t)number;
        return true;
    }
    if (strcmp(name, "--fault") == 0 && options->fault_count < FAULTS_MAX) {
        options->faults[options->fault_count++] = value;
        return true;
    }
    return false;
}

static bool read_options(struct options *options, int count, char **arguments)
{
    *options = (struct options){.baud = 115200, .board = "ramprig-core", .serial = "POSIX-0001"};
    for (int i = 1; i < count; i++) {
        if (strcmp(arguments[i], "--help") == 0) {
            fputs(usage, stdout);
            exit(0);
        }
        if (strcmp(arguments[i], "--lockstep") == 0) {
            options->lockstep = true;
        } else if (i + 1 >= count || !read_option(options, arguments[i], arguments[i + 1])) {
            fprintf(stderr, "ramprig-core: '%s' means nothing, or not with what follows it\n\n%s", arguments[i], usage);
            return false;
        } else {
            i++;
        }
    }
    return true;
}

/* Lines of a name and a value. */
static bool read_plant(struct plant_parameters *parameters, const char *path)
{
    FILE *file = fopen(path, "r");
    char line[LINE_BYTES];
    int number = 0;
    bool right = true;
    if (file == NULL) {
        fprintf(stderr, "ramprig-core: %s: %s\n", path, strerror(errno));
        return false;
    }
    while (right && fgets(line, sizeof line, file) != NULL) {
        char name[LINE_BYTES];
        double value;
        number++;
        right = sscanf(line, "%127s %lf", name, &value) == 2 && plant_parameters_set(parameters, name, value);
    }
    fclose(file);
    if (!right) {
        fprintf(stderr, "ramprig-core: %s:%d: this is no parameter of the plant with a value it can have\n", path, number);
    }
    return right;
}

/* A whole text as a number; false where it is none. */
static bool read_amount(const char *text, double *amount)
{
    char *end;
    *amount = strtod(text, &end);
    return end != text && *end == '\0' && isfinite(*amount);
}

static bool set_fault(struct simulated *s, const char *text)
{
    char name[LINE_BYTES];
    snprintf(name, sizeof name, "%s", text);
    char *value = strchr(name, '=');
    if (value != NULL) {
        *value++ = '\0';
    }
    char *axis = strchr(name, ':');
    if (axis != NULL) {
        *axis++ = '\0';
    }
    uint64_t index = 0;
    double amount = 1.0;
    if ((axis != NULL && !read_number(axis, RR_AXES - 1, &index)) || (value != NULL && !read_amount(value, &amount)) ||
        !simulated_fault(s, name, (uint8_t)index, amount)) {
        fprintf(stderr, "ramprig-core: '%s' is no fault here; write NAME, NAME=AMOUNT or NAME:AXIS=AMOUNT\n", text);
        return false;
    }
    return true;
}

/* A name as SPEC FIELD-4 allows it: with a blank in it, every line that tells it would have a field too many. */
static bool is_token(const char *text)
{
    size_t length = strlen(text);
    bool right = length >= 1 && length <= RR_TOKEN_MAX &&
                 strspn(text, "ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789._-") == length;
    if (!right) {
        fprintf(stderr, "ramprig-core: '%s' is no name for a board: 1 to %d of A-Z a-z 0-9 . _ -\n", text, RR_TOKEN_MAX);
    }
    return right;
}

static uint64_t clock_us(void)
{
    struct timespec now;
    (void)clock_gettime(CLOCK_MONOTONIC, &now);
    return (uint64_t)now.tv_sec * 1000000u + (uint64_t)now.tv_nsec / 1000u;
}

/* Lets the board catch up with the clock, and hands over what it sends meanwhile. */
static void catch_up(struct simulated *s, struct endpoint *endpoint, uint64_t *start_us)
{
    uint64_t passed_us = clock_us() - *start_us;
    uint64_t board_us = s->ticks * RR_TICK_US;
    if (passed_us > board_us + LAG_MAX_US) {
        *start_us += passed_us - board_us;
        return;
    }
    while (s->ticks < passed_us / RR_TICK_US) {
        uint32_t length;
        (void)simulated_run(s, (uint32_t)(passed_us / RR_TICK_US - s->ticks), false);
        const char *sent = simulated_take(s, &length);
        endpoint_write(endpoint, sent, length, false);
    }
}

static void serve_paced(struct simulated *s, struct endpoint *endpoint)
{
    uint8_t bytes[READ_BYTES];
    uint64_t start_us = clock_us();
    while (!stopping) {
        bool came;
        size_t length = endpoint_read(endpoint, bytes, sizeof bytes, WAIT_MS, &came);
        catch_up(s, endpoint, &start_us);
        simulated_receive(s, bytes, (uint32_t)length);
    }
}

static void serve_lockstep(struct simulated *s, struct endpoint *endpoint)
{
    static struct lockstep lockstep;
    static uint8_t reply[LOCKSTEP_REPLY + SIMULATED_TRANSMIT_BYTES];
    uint8_t bytes[READ_BYTES];
    lockstep_begin(&lockstep, s);
    while (!stopping) {
        bool came;
        bool right = true;
        size_t length = endpoint_read(endpoint, bytes, sizeof bytes, 100, &came);
        if (came) {
            lockstep_begin(&lockstep, s);
        }
        for (size_t i = 0; i < length && right; i++) {
            uint32_t answer = lockstep_take(&lockstep, s, bytes[i], reply, &right);
            endpoint_write(endpoint, reply, answer, true);
        }
        if (!right) {
            fprintf(stderr, "ramprig-core: the host does not speak in lockstep frames\n");
        }
    }
}

int main(int count, char **arguments)
{
    static struct simulated s;
    static struct storefile storefile;
    struct options options;
    struct endpoint endpoint;
    if (!read_options(&options, count, arguments) || !is_token(options.board) || !is_token(options.serial)) {
        return 2;
    }
    simulated_clear(&s);
    snprintf(s.firmware, sizeof s.firmware, "core-1");
    snprintf(s.board, sizeof s.board, "%s", options.board);
    snprintf(s.serial, sizeof s.serial, "%s", options.serial);
    s.seed = options.seed;
    s.boot_ticks = 300000u / RR_TICK_US;
    s.brownout_mv = 4500;
    if ((options.plant != NULL && !read_plant(&s.parameters, options.plant)) ||
        (options.store != NULL && !storefile_open(&storefile, &s, options.store))) {
        return 2;
    }
    if (!simulated_start(&s, options.baud)) {
        fprintf(stderr, "ramprig-core: this plant has other motors and servos than the board (%d and %d), or cannot be\n",
                RR_AXES, RR_SERVOS);
        return 2;
    }
    for (int i = 0; i < options.fault_count; i++) {
        if (!set_fault(&s, options.faults[i])) {
            return 2;
        }
    }
    if (!(options.tcp != NULL ? endpoint_open_tcp(&endpoint, options.tcp)
                              : endpoint_open_terminal(&endpoint, options.link))) {
        return 3;
    }
    struct sigaction action = {.sa_handler = stop};
    (void)sigaction(SIGTERM, &action, NULL);
    (void)sigaction(SIGINT, &action, NULL);
    (void)signal(SIGPIPE, SIG_IGN);
    printf("%s\n", endpoint.name);
    fflush(stdout);
    (options.lockstep ? serve_lockstep : serve_paced)(&s, &endpoint);
    endpoint_close(&endpoint);
    return 0;
}
