/*
 * A test latch: the latch's state, and one step a tick.
 *
 * Written by porter 0.1.0 from stair_toggle.yaml, SHA-256
 * 0000000000000000000000000000000000000000000000000000000000000000
 * Don't edit; remake it with: porter port stair_toggle.yaml -o DIR
 *
 * Same as the circuit for every sequence of any length.
 */
#ifndef STAIR_TOGGLE_H
#define STAIR_TOGGLE_H

#include <stdbool.h>
#include <stdint.h>

/* The time between two steps, in microseconds. */
#define STAIR_TOGGLE_TICK_US 1000u

/* Bits of `held`: set while the button is pressed. */
#define STAIR_TOGGLE_BUTTON_PUSH 0x01u /* PUSH */

/* Bits of the answer: set while the output is active. */
#define STAIR_TOGGLE_OUTPUT_LAMP 0x01u /* lamp */

/* The state; leave its members to the functions below. */
typedef struct {
    /* bit 0: the latch, 1 = output high; bits 1 to 7: open ticks until the next press acts. */
    uint8_t bits;
    /* agreement counter, 0 to 5. */
    uint8_t n_push;
} stair_toggle_t;

/* Set the power-on state; before anything else. */
void stair_toggle_init(stair_toggle_t *m);

/* Advance by one tick. `held`: see above, as read in this tick. Returns the active outputs.
 * From any bit pattern of the state the core is back in a legal one after at most 251 ticks with
 * the buttons open.
 */
uint8_t stair_toggle_step(stair_toggle_t *m, uint8_t held);

/* True: stepping again with the `held` of the last step would change neither the state nor the
 * answer, for ever. The controller may sleep until a button changes. Step once before the first call.
 */
bool stair_toggle_idle(const stair_toggle_t *m);

#endif
