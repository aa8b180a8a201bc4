/* The sizes of the test build that runs the vectors: the port's, with lines as long as the vectors have them where they fit. */
#include "../../ports/atmega328p/sizes.h"

#include <stdint.h>

extern volatile int16_t scripted_temperature_dc; /* inputs.c */
#define TEMPERATURE_DC scripted_temperature_dc

#ifdef SCRIPTED_PAYLOAD
#undef RR_PAYLOAD
#define RR_PAYLOAD SCRIPTED_PAYLOAD
#endif

#undef RR_TRAIL_PAYLOAD
#define RR_TRAIL_PAYLOAD RR_TRAIL_PAYLOAD_MAX

#ifdef SCRIPTED_QUEUE
#undef RR_QUEUE
#define RR_QUEUE SCRIPTED_QUEUE
#endif
