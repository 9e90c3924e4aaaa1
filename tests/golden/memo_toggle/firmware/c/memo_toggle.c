/*
 * A test latch: the latch as a machine of integers.
 *
 * Written by porter 0.1.0 from memo_toggle.yaml, SHA-256
 * 0000000000000000000000000000000000000000000000000000000000000000
 * Don't edit; remake it with: porter port memo_toggle.yaml -o DIR
 *
 * Same as the circuit for every sequence of any length.
 *
 * Made by hand for a test.
 */
#include "memo_toggle.h"

/* Copy of the memory at power-on
 * = 0 V / 0.1 mV = 65000
 * from memo_toggle.yaml:3
 */
#define MEMO_TOGGLE_START 65000u
/* Upper threshold
 * = 2/3 * 65536
 * from memo_toggle.yaml:4
 */
#define MEMO_TOGGLE_LIMIT_LOW_PUSH 40000u
/* The latch leaves high where the copy is at most this. */
#define MEMO_TOGGLE_LIMIT_HIGH_PUSH 20000u
/* Where the copy of mem goes in the end in this mode. */
#define MEMO_TOGGLE_END_LOW_OPEN 65000u
/* Where the copy of mem goes in the end in this mode. */
#define MEMO_TOGGLE_END_LOW_PUSH 36000u
/* Where the copy of mem goes in the end in this mode. */
#define MEMO_TOGGLE_END_HIGH_OPEN 300u
/* Held level
 * = 12 V * 10k/(10k + 5k)
 * from memo_toggle.yaml:6
 */
#define MEMO_TOGGLE_END_HIGH_PUSH 26000u
/* Part of its distance that the copy of mem goes in a tick, as a power of two.
 * also for: high with none held
 */
#define MEMO_TOGGLE_SHIFT_OPEN 8u
/* Part of its distance that the copy of mem goes in a tick, as a power of two.
 * also for: high with PUSH
 */
#define MEMO_TOGGLE_SHIFT_PUSH 3u

void memo_toggle_init(memo_toggle_t *m)
{
    m->x = MEMO_TOGGLE_START;
    m->q = 0u;
}

uint8_t memo_toggle_step(memo_toggle_t *m, uint8_t held)
{
    uint16_t x = m->x;
    uint8_t q = (uint8_t)(m->q & 1u);

    /* Decide with the charge from before this tick. */
    if ((held & MEMO_TOGGLE_BUTTON_PUSH) != 0u) {
        if (q == 0u) {
            if (x >= MEMO_TOGGLE_LIMIT_LOW_PUSH) {
                q = 1u;
            }
        } else if (x <= MEMO_TOGGLE_LIMIT_HIGH_PUSH) {
            q = 0u;
        } else {
            /* as it is */
        }
    }

    /* Move the copy of mem by one tick. */
    uint16_t end;
    uint8_t shift;
    if ((held & MEMO_TOGGLE_BUTTON_PUSH) != 0u) {
        if (q != 0u) {
            end = MEMO_TOGGLE_END_HIGH_PUSH;
        } else {
            end = MEMO_TOGGLE_END_LOW_PUSH;
        }
        shift = MEMO_TOGGLE_SHIFT_PUSH;
    } else {
        if (q != 0u) {
            end = MEMO_TOGGLE_END_HIGH_OPEN;
        } else {
            end = MEMO_TOGGLE_END_LOW_OPEN;
        }
        shift = MEMO_TOGGLE_SHIFT_OPEN;
    }
    uint16_t by = (x < end) ? (uint16_t)(end - x) : (uint16_t)(x - end);
    by = (uint16_t)((uint16_t)((uint16_t)(by >> (uint8_t)(shift - 1u)) + 1u) >> 1u);
    x = (x < end) ? (uint16_t)(x + by) : (uint16_t)(x - by);

    m->x = x;
    m->q = q;

    return q;
}

bool memo_toggle_idle(const memo_toggle_t *m)
{
    memo_toggle_t next;

    next.x = m->x;
    next.q = m->q;
    (void)memo_toggle_step(&next, 0u);
    return (next.x == m->x) && (next.q == m->q);
}
