/*
 * A test latch: the latch's state, and one step a tick.
 *
 * Written by porter 0.1.0 from lamp_latch.yaml, SHA-256
 * 0000000000000000000000000000000000000000000000000000000000000000
 * Don't edit; remake it with: porter port lamp_latch.yaml -o DIR
 *
 * Same as the circuit for every sequence of any length.
 */
#ifndef LAMP_LATCH_H
#define LAMP_LATCH_H

#include <stdbool.h>
#include <stdint.h>

/* The time between two steps, in microseconds. */
#define LAMP_LATCH_TICK_US 1000u

/* Bits of `held`: set while the button is pressed. */
#define LAMP_LATCH_BUTTON_SET 0x01u /* SET */
#define LAMP_LATCH_BUTTON_CLEAR 0x02u /* CLEAR */

/* Bits of the answer: set while the output is active. */
#define LAMP_LATCH_OUTPUT_LAMP 0x01u /* lamp */

/* The state; leave its members to the functions below. */
typedef struct {
    /* the latch, 1 = output high. */
    uint8_t q;
} lamp_latch_t;

/* Set the power-on state; before anything else. */
void lamp_latch_init(lamp_latch_t *m);

/* Advance by one tick. `held`: see above, as read in this tick. Returns the active outputs.
 * From any bit pattern of the state the core is back in a legal one after at most 1 tick with the
 * buttons open.
 */
uint8_t lamp_latch_step(lamp_latch_t *m, uint8_t held);

/* True: stepping again with the `held` of the last step would change neither the state nor the
 * answer, for ever. The controller may sleep until a button changes. Step once before the first call.
 */
bool lamp_latch_idle(const lamp_latch_t *m);

#endif
