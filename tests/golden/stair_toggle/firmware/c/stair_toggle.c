/*
 * A test latch: the latch as a machine of integers.
 *
 * Written by porter 0.1.0 from stair_toggle.yaml, SHA-256
 * 0000000000000000000000000000000000000000000000000000000000000000
 * Don't edit; remake it with: porter port stair_toggle.yaml -o DIR
 *
 * Same as the circuit for every sequence of any length.
 *
 * Made by hand for a test.
 */
#include "stair_toggle.h"

/* Ticks that PUSH must be seen held in a row to count as down. */
#define STAIR_TOGGLE_PRESS_PUSH 5u
/* Open ticks from a press that acted to the next that acts, latch either. */
#define STAIR_TOGGLE_TAP 110u
/* The same after a press held until settled, latch either. */
#define STAIR_TOGGLE_HOLD 40u

void stair_toggle_init(stair_toggle_t *m)
{
    m->bits = 0u;
    m->n_push = 0u;
}

uint8_t stair_toggle_step(stair_toggle_t *m, uint8_t held)
{
    uint8_t q = (uint8_t)(m->bits & 1u);
    uint8_t c = (uint8_t)(m->bits >> 1u);
    uint_fast8_t n_push = m->n_push;

    /* PUSH: a change counts once seen long enough. */
    if ((held & STAIR_TOGGLE_BUTTON_PUSH) != 0u) {
        if (n_push < STAIR_TOGGLE_PRESS_PUSH) {
            n_push++;
        }
    } else {
        n_push = 0u;
    }

    /* PUSH turns the latch once the re-arm counter has run out. */
    if (n_push >= STAIR_TOGGLE_PRESS_PUSH) {
        if (c == 0u) {
            q ^= 1u;
            c = STAIR_TOGGLE_TAP;
        }
        if (c < STAIR_TOGGLE_HOLD) {
            c++;
        } else if (c > STAIR_TOGGLE_HOLD) {
            c--;
        } else {
            /* as it is */
        }
    } else if (c > 0u) {
        c--;
    } else {
        /* as it is */
    }

    m->bits = (uint8_t)(q | (uint8_t)(c << 1u));
    m->n_push = (uint8_t)n_push;

    return q;
}

bool stair_toggle_idle(const stair_toggle_t *m)
{
    stair_toggle_t next;
    uint_fast8_t n_push = m->n_push;
    uint8_t was = 0u;

    if (n_push >= STAIR_TOGGLE_PRESS_PUSH) {
        was |= STAIR_TOGGLE_BUTTON_PUSH;
    }
    next.bits = m->bits;
    next.n_push = m->n_push;
    (void)stair_toggle_step(&next, was);
    return (next.bits == m->bits) && (next.n_push == m->n_push);
}
