/*
 * A test latch: the latch as a machine of integers.
 *
 * Written by porter 0.1.0 from even_toggle.yaml, SHA-256
 * 0000000000000000000000000000000000000000000000000000000000000000
 * Don't edit; remake it with: porter port even_toggle.yaml -o DIR
 *
 * Same as the circuit for every sequence of any length.
 *
 * Made by hand for a test.
 */
#include "even_toggle.h"

/* Copy of mem at power-on. */
#define EVEN_TOGGLE_START 0u
/* The latch leaves low where the copy is at most this.
 * also for: high with PUSH
 */
#define EVEN_TOGGLE_LIMIT_LOW_PUSH 21845u
/* Part of the copy of mem that stays in a tick, in 65536ths.
 * also for: high with none held
 */
#define EVEN_TOGGLE_STAYS_OPEN 64668u
/* Part of the copy of mem that stays in a tick, in 65536ths.
 * also for: high with PUSH
 */
#define EVEN_TOGGLE_STAYS_PUSH 46337u
/* What the copy of mem gains in a tick.
 * also for: high with PUSH
 */
#define EVEN_TOGGLE_ADD_PUSH 9230u

/* x * stays / 65536, rounded down. */
static uint16_t even_toggle_scaled(uint16_t x, uint16_t stays)
{
    return (uint16_t)(((uint32_t)x * stays) >> 16u);
}

void even_toggle_init(even_toggle_t *m)
{
    m->x = EVEN_TOGGLE_START;
    m->q = 0u;
}

uint8_t even_toggle_step(even_toggle_t *m, uint8_t held)
{
    uint16_t x = m->x;
    uint8_t q = (uint8_t)(m->q & 1u);

    /* Decide with the charge from before this tick; move the copy of mem. */
    if ((held & EVEN_TOGGLE_BUTTON_PUSH) != 0u) {
        if (x <= EVEN_TOGGLE_LIMIT_LOW_PUSH) {
            q ^= 1u;
            x ^= 0xFFFFu;
        }
        m->q = q;
        x = (uint16_t)(even_toggle_scaled(x, EVEN_TOGGLE_STAYS_PUSH) + EVEN_TOGGLE_ADD_PUSH);
    } else {
        m->q = q;
        x = even_toggle_scaled(x, EVEN_TOGGLE_STAYS_OPEN);
    }

    m->x = x;

    return m->q;
}

bool even_toggle_idle(const even_toggle_t *m)
{
    even_toggle_t next;

    next.x = m->x;
    next.q = m->q;
    (void)even_toggle_step(&next, 0u);
    return (next.x == m->x) && (next.q == m->q);
}
