/* Sizes of one build of the core. A port sets what differs before this header's defaults, with -D or by its own header. */
#ifndef RAMPRIG_CONFIG_H
#define RAMPRIG_CONFIG_H

#include "words.h"

#ifdef RR_CONFIG_HEADER
#include RR_CONFIG_HEADER
#endif

#ifndef RR_AXES
#define RR_AXES 1 /* motors fitted */
#endif
#ifndef RR_SERVOS
#define RR_SERVOS 1 /* servos fitted */
#endif
#ifndef RR_MAX_DUTY
#define RR_MAX_DUTY RR_DUTY_FULL /* the board's own greatest duty */
#endif
#ifndef RR_QUEUE
#define RR_QUEUE 16 /* depth of the order queue */
#endif
#ifndef RR_TRAIL
#define RR_TRAIL 256 /* records in the trail, a multiple of 4 */
#endif
#ifndef RR_KEEP
#define RR_KEEP 8 /* data lines kept for `again`; 0 = none */
#endif
#ifndef RR_NOTICES
#define RR_NOTICES (6 + 3 * RR_AXES + 2 * RR_SERVOS) /* notices waiting to be said */
#endif
#ifndef RR_PAYLOAD
#define RR_PAYLOAD RR_PAYLOAD_MAX /* longest payload of a data line, in characters */
#endif
#ifndef RR_TRAIL_PAYLOAD
#define RR_TRAIL_PAYLOAD RR_TRAIL_PAYLOAD_MAX /* longest payload of a `trail` answer, in characters */
#endif
#ifndef RR_TICK_US
#define RR_TICK_US 1000 /* length of a tick */
#endif
#ifndef RR_CAPS
#define RR_CAPS (RR_CAP_ENCODER | RR_CAP_CURRENT | RR_CAP_SUPPLY | RR_CAP_KEEPS_LIMITS | RR_CAP_BREAK)
#endif

/* How the work that can wait is done. 0: within the tick, as a fast processor can, so that a line is made in the tick it
 * tells of. 1: in small pieces between the ticks, by the port's calls of `rr_device_idle`; then a tick carries out at most
 * one request, and the queue of bytes to send needs no room for a whole line. */
#ifndef RR_SPREAD
#define RR_SPREAD 0
#endif
#ifndef RR_PIECE
#define RR_PIECE 32 /* bytes heard or said in one piece of idle work */
#endif

#ifndef RR_LIMITS_SET_MAX
#define RR_LIMITS_SET_MAX (RR_SPREAD ? 1 : RR_LIMITS) /* limits that requests of one tick can set */
#endif

/* The longest body of a request after its tag: a line less LF, check, tag and its space. */
#define RR_BODY_MAX (RR_HOST_LINE_MAX - 1 - 5 - 3)

/* Where tables are kept: a controller that cannot read its program memory as data sets its address space. */
#ifndef RR_FLASH
#define RR_FLASH
#endif

/* An unsigned type of 24 bits or more: for a running mean's sum (22 bits: 32 values of RICE_SUM_CAP), and for a glide's way
 * (2600 us in ns, 20000 of duty). */
#ifndef RR_U24
#define RR_U24 uint32_t
#endif

/* The same, signed: for a pulse in ns and a duty. */
#ifndef RR_I24
#define RR_I24 int32_t
#endif

/* What a reading of the current and of the supply takes. A board may have narrower ones that hold all its sensors tell,
 * the current less any offset_ma. */
#ifndef RR_CURRENT
#define RR_CURRENT int32_t
#define RR_SUPPLY  int32_t
#endif

/* How the last request is kept to know a repetition (TAG-3): 1 whole, 0 by its length and 48 bits of checks. */
#ifndef RR_KEEP_BODY
#define RR_KEEP_BODY 1
#endif

/* What a record of the trail holds. A board may have narrower ones where its sensors and its encoder's speed fit them:
 * counts need only span what a shaft can turn within the trail. */
#ifndef RR_TRAIL_COUNTS
#define RR_TRAIL_COUNTS uint32_t /* unsigned, of 16 or 32 bits: the low bits of the counts */
#define RR_TRAIL_CURRENT int32_t
#define RR_TRAIL_SUPPLY int32_t
#endif

#ifndef RR_START_TICK
#define RR_START_TICK 0 /* number of the first tick; another one only to test the wrap */
#endif

/* An axis by its number, which is 0 where there is one only: so that a small controller need not multiply to find it. */
#define RR_AXIS(index) (RR_AXES == 1 ? 0 : (index))

/* A function that is kept once and apart: copies of it in its callers would cost a small controller more than calls. */
#if defined __GNUC__ && RR_SPREAD
#define RR_APART __attribute__((noinline))
#else
#define RR_APART
#endif

/* A pointer to a part of the device that is to be held in a register. A compiler that knows where the device is would write
 * out the whole address at each use, which takes twice the room on a small controller. */
#ifndef RR_NEAR
#define RR_NEAR(pointer) (pointer)
#endif

/* The number of limit values of this build, in the order of the digest. */
#define RR_DEVICE_LIMITS 5
#define RR_AXIS_LIMITS   17
#define RR_SERVO_LIMITS  4
#define RR_LIMITS        (RR_DEVICE_LIMITS + RR_AXIS_LIMITS * RR_AXES + RR_SERVO_LIMITS * RR_SERVOS)

_Static_assert(RR_AXES >= 1 && RR_AXES <= RR_AXES_MAX, "SPEC: one to RR_AXES_MAX axes");
_Static_assert(RR_SERVOS >= 0 && RR_SERVOS <= RR_SERVOS_MAX, "SPEC: at most RR_SERVOS_MAX servos");
_Static_assert(RR_QUEUE >= RR_QUEUE_MIN && RR_QUEUE <= 255, "SPEC WHO-1; the queue is counted in a byte");
_Static_assert(RR_TRAIL >= RR_TRAIL_MIN && RR_TRAIL % 4 == 0, "SPEC WHO-1, TRAIL-1");
_Static_assert(RR_SPREAD || RR_LIMITS_SET_MAX >= RR_LIMITS, "a tick may carry out any number of requests");
_Static_assert(RR_PAYLOAD <= RR_PAYLOAD_MAX && RR_TRAIL_PAYLOAD <= RR_TRAIL_PAYLOAD_MAX, "SPEC DATA-9, TRAIL-2");
_Static_assert(RR_TICK_US >= 100 && RR_TICK_US <= 100000, "a lease of 5000 ms fits 16 bits of ticks");
_Static_assert(RR_MAX_DUTY >= 0 && RR_MAX_DUTY <= RR_DUTY_FULL, "duty in 1/10000");

#endif
