/*
 * A test latch: the latch as a machine of integers.
 *
 * Written by porter 0.1.0 from lamp_latch.yaml, SHA-256
 * 0000000000000000000000000000000000000000000000000000000000000000
 * Don't edit; remake it with: porter port lamp_latch.yaml -o DIR
 *
 * Same as the circuit for every sequence of any length.
 *
 * Made by hand for a test.
 */
#include "lamp_latch.h"

void lamp_latch_init(lamp_latch_t *m)
{
    m->q = 0u;
}

uint8_t lamp_latch_step(lamp_latch_t *m, uint8_t held)
{
    uint8_t q = (uint8_t)(m->q & 1u);

    /* The latch by level. */
    if ((held & LAMP_LATCH_BUTTON_CLEAR) != 0u) {
        q = 0u;
    } else if ((held & LAMP_LATCH_BUTTON_SET) != 0u) {
        q = 1u;
    } else {
        /* as it is */
    }

    m->q = q;

    return q;
}

bool lamp_latch_idle(const lamp_latch_t *m)
{
    (void)m;
    return true;
}
