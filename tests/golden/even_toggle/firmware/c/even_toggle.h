/*
 * A test latch: the latch's state, and one step a tick.
 *
 * Written by porter 0.1.0 from even_toggle.yaml, SHA-256
 * 0000000000000000000000000000000000000000000000000000000000000000
 * Don't edit; remake it with: porter port even_toggle.yaml -o DIR
 *
 * Same as the circuit for every sequence of any length.
 */
#ifndef EVEN_TOGGLE_H
#define EVEN_TOGGLE_H

#include <stdbool.h>
#include <stdint.h>

/* The time between two steps, in microseconds. */
#define EVEN_TOGGLE_TICK_US 1000u

/* Bits of `held`: set while the button is pressed. */
#define EVEN_TOGGLE_BUTTON_PUSH 0x01u /* PUSH */

/* Bits of the answer: set while the output is active. */
#define EVEN_TOGGLE_OUTPUT_LAMP 0x01u /* lamp */

/* The state; leave its members to the functions below. */
typedef struct {
    /* copy of mem, 0 V + 0.0001 V each; 65535 less itself while the latch is 1. */
    uint16_t x;
    /* the latch, 1 = output high. */
    uint8_t q;
} even_toggle_t;

/* Set the power-on state; before anything else. */
void even_toggle_init(even_toggle_t *m);

/* Advance by one tick. `held`: see above, as read in this tick. Returns the active outputs.
 * Every bit pattern of the state is a legal one after one step: a copy that was disturbed is some
 * voltage, and decays with the circuit's own time constant.
 */
uint8_t even_toggle_step(even_toggle_t *m, uint8_t held);

/* True: stepping again with the `held` of the last step would change neither the state nor the
 * answer, for ever. The controller may sleep until a button changes. Step once before the first call.
 * It says so only with the buttons open: to see it with one held would cost the state its last reading.
 */
bool even_toggle_idle(const even_toggle_t *m);

#endif
