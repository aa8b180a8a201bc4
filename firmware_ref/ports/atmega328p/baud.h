/* The UART's divider for a rate: of the two speeds (U2X 0 and 1) the one with the smaller error, the normal one on a tie.
 *
 * rate = F_CPU / (16 (UBRR + 1)), or F_CPU / (8 (UBRR + 1)) at double speed. Checked by a test against the table of the data
 * sheet. At 16 MHz 115200 is 2.1 % too fast, where the data sheet recommends at most 1.5 % at double speed: it works with
 * most adapters and leaves little for their own error. 250000 and 500000 are exact. */
#ifndef ATMEGA328P_BAUD_H
#define ATMEGA328P_BAUD_H

/* UBRR, rounded; `clocks` is 16 at the normal speed, 8 at the double one. */
#define BAUD_UBRR(f_cpu, baud, clocks) (((f_cpu) + (clocks) / 2 * (baud)) / ((clocks) * (baud)) - 1)

/* The rate that comes of it, in 1/1000 of the one wanted; 1000 = exact. */
#define BAUD_PERMILLE(f_cpu, baud, clocks) \
    ((1000ll * (f_cpu) / ((clocks) * (BAUD_UBRR(f_cpu, baud, clocks) + 1ll)) + (baud) / 2) / (baud))

#define BAUD_OFF(permille) ((permille) > 1000 ? (permille) - 1000 : 1000 - (permille))

#define BAUD_DOUBLE(f_cpu, baud) \
    (BAUD_OFF(BAUD_PERMILLE(f_cpu, baud, 8)) < BAUD_OFF(BAUD_PERMILLE(f_cpu, baud, 16)))

#define BAUD_CLOCKS(f_cpu, baud) (BAUD_DOUBLE(f_cpu, baud) ? 8 : 16)

#endif
