/* The core's sizes on this board (those in #ifndef a test build may change): 2 kB of memory, an 8-bit adder, program memory that is not read as data. */
#ifndef ATMEGA328P_SIZES_H
#define ATMEGA328P_SIZES_H

#define RR_AXES     1
#ifndef RR_SERVOS
#define RR_SERVOS   2
#endif
#ifndef RR_MAX_DUTY
#define RR_MAX_DUTY 9800 /* the high side's bootstrap capacitor needs the low side on for a part of each period */
#endif
#define RR_QUEUE    8
#define RR_TRAIL    32
#ifndef RR_KEEP
#define RR_KEEP     0
#endif
#define RR_NOTICES  8
#define RR_PAYLOAD  54 /* characters: as many as a plain sample of all channels takes bytes for */
#define RR_TRAIL_PAYLOAD 36
#ifndef RR_CAPS
#define RR_CAPS (RR_CAP_ENCODER | RR_CAP_CURRENT | RR_CAP_SUPPLY | RR_CAP_KEEPS_LIMITS | RR_CAP_BREAK)
#endif

/* Lines are made between the ticks, three characters at a time. */
#define RR_SPREAD 1
#define RR_PIECE  2

#define RR_FLASH __flash
#define RR_ONLY_PORT board_port /* in main.c */
#define RR_NEAR(pointer) /* the compiler is told that it may be any address */ \
    ({                                                                         \
        __typeof__(pointer) near_ = (pointer);                                 \
        __asm__("" : "+r"(near_));                                             \
        near_;                                                                 \
    })
#define RR_U24   __uint24
#define RR_I24   __int24
#define RR_KEEP_BODY 0

/* 10-bit converters: currents to 13.5 A, less an offset of at most 5 A, supplies to 21.5 V (board.h), and a shaft that turns less than 32768 counts in
 * the 32 ms of the trail. */
#define RR_TRAIL_COUNTS  uint16_t
#define RR_CURRENT       int16_t
#define RR_SUPPLY        uint16_t
#define RR_TRAIL_CURRENT int16_t
#define RR_TRAIL_SUPPLY  uint16_t

#endif
