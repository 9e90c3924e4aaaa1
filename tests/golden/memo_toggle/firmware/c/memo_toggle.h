/*
 * A test latch: the latch's state, and one step a tick.
 *
 * Written by porter 0.1.0 from memo_toggle.yaml, SHA-256
 * 0000000000000000000000000000000000000000000000000000000000000000
 * Don't edit; remake it with: porter port memo_toggle.yaml -o DIR
 *
 * Same as the circuit for every sequence of any length.
 */
#ifndef MEMO_TOGGLE_H
#define MEMO_TOGGLE_H

#include <stdbool.h>
#include <stdint.h>

/* The time between two steps, in microseconds. */
#define MEMO_TOGGLE_TICK_US 1000u

/* Bits of `held`: set while the button is pressed. */
#define MEMO_TOGGLE_BUTTON_PUSH 0x01u /* PUSH */

/* Bits of the answer: set while the output is active. */
#define MEMO_TOGGLE_OUTPUT_LAMP 0x01u /* lamp */

/* The state; leave its members to the functions below. */
typedef struct {
    /* copy of mem, 0 V + 0.0001 V each. */
    uint16_t x;
    /* the latch, 1 = output high. */
    uint8_t q;
} memo_toggle_t;

/* Set the power-on state; before anything else. */
void memo_toggle_init(memo_toggle_t *m);

/* Advance by one tick. `held`: see above, as read in this tick. Returns the active outputs.
 * Every bit pattern of the state is a legal one after one step: a copy that was disturbed is some
 * voltage, and decays with the circuit's own time constant.
 */
uint8_t memo_toggle_step(memo_toggle_t *m, uint8_t held);

/* True: stepping again with the `held` of the last step would change neither the state nor the
 * answer, for ever. The controller may sleep until a button changes. Step once before the first call.
 * It says so only with the buttons open: to see it with one held would cost the state its last reading.
 */
bool memo_toggle_idle(const memo_toggle_t *m);

#endif
