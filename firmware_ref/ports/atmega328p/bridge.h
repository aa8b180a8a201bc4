/* The H-bridge's two inputs and its enable, by Timer2's PWM. */
#ifndef ATMEGA328P_BRIDGE_H
#define ATMEGA328P_BRIDGE_H

#include <stdbool.h>
#include <stdint.h>

/* Starts Timer2; the pins stay as they are. */
void bridge_begin(void);

/* Drives with a duty in 1/10000 by sign and magnitude, to 1/255; at 0 both inputs are low, or high to brake. Between two
 * states both inputs are low; never are both on PWM. */
void bridge_drive(int16_t duty, bool brake);

/* Disables the driver, and both inputs low. */
void bridge_off(void);

#endif
