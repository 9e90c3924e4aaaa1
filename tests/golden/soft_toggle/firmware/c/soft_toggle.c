/*
 * A test latch: the latch as a machine of integers.
 *
 * Written by porter 0.1.0 from soft_toggle.yaml, SHA-256
 * 0000000000000000000000000000000000000000000000000000000000000000
 * Don't edit; remake it with: porter port soft_toggle.yaml -o DIR
 *
 * Same as the circuit for every sequence of any length.
 *
 * Made by hand for a test.
 */
#include "soft_toggle.h"

/* Copy of mem at power-on. */
#define SOFT_TOGGLE_START 0u
/* The latch leaves low where the copy is at most this.
 * also for: high with PUSH
 */
#define SOFT_TOGGLE_LIMIT_LOW_PUSH 21845u
/* Part of the copy of mem that goes in a tick, as a power of two.
 * also for: high with none held
 */
#define SOFT_TOGGLE_GOES_OPEN 8u
/* Part of the copy of mem that goes in a tick, as a power of two.
 * also for: high with PUSH
 */
#define SOFT_TOGGLE_GOES_PUSH 3u
/* What the copy of mem gains in a tick.
 * also for: high with PUSH
 */
#define SOFT_TOGGLE_ADD_PUSH 3939u

void soft_toggle_init(soft_toggle_t *m)
{
    m->x = SOFT_TOGGLE_START;
    m->q = 0u;
}

uint8_t soft_toggle_step(soft_toggle_t *m, uint8_t held)
{
    uint16_t x = m->x;
    uint8_t q = (uint8_t)(m->q & 1u);

    /* Decide with the charge from before this tick; move the copy of mem. */
    if ((held & SOFT_TOGGLE_BUTTON_PUSH) != 0u) {
        if (x <= SOFT_TOGGLE_LIMIT_LOW_PUSH) {
            q ^= 1u;
            x ^= 0xFFFFu;
        }
        x = (uint16_t)(x
            - (uint16_t)((uint16_t)(x >> SOFT_TOGGLE_GOES_PUSH) - SOFT_TOGGLE_ADD_PUSH));
    } else {
        x = (uint16_t)(x - (uint16_t)(x >> SOFT_TOGGLE_GOES_OPEN));
    }

    m->x = x;
    m->q = q;

    return q;
}

bool soft_toggle_idle(const soft_toggle_t *m)
{
    soft_toggle_t next;

    next.x = m->x;
    next.q = m->q;
    (void)soft_toggle_step(&next, 0u);
    return (next.x == m->x) && (next.q == m->q);
}
