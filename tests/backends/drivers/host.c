/* Drives a core compiled for this machine: many ticks a call, from bytes or from runs. */
#include "each.h"

void porter_bytes(const uint8_t *in, uint8_t *out, uint64_t count);
uint64_t porter_runs(const uint64_t *in, uint64_t count, uint64_t *out, uint64_t room);

/* A byte a tick. */
void porter_bytes(const uint8_t *in, uint8_t *out, uint64_t count)
{
    for (uint64_t i = 0u; i < count; i++) {
        out[i] = each(in[i]);
    }
}

/* From power-on; pairs (ticks, held) in, pairs (ticks, outputs) out. Returns the pairs written, or
 * `room` + 1 where there are more. */
uint64_t porter_runs(const uint64_t *in, uint64_t count, uint64_t *out, uint64_t room)
{
    uint64_t used = 0u;

    CORE_INIT(&each_core);
    for (uint64_t i = 0u; i < count; i++) {
        uint8_t held = (uint8_t)in[2u * i + 1u];
        for (uint64_t left = in[2u * i]; left != 0u; left--) {
            uint8_t answer = CORE_STEP(&each_core, held);
            if (used == 0u || out[2u * used - 1u] != answer) {
                if (used == room) {
                    return room + 1u;
                }
                out[2u * used] = 0u;
                out[2u * used + 1u] = answer;
                used++;
            }
            out[2u * used - 2u]++;
        }
    }
    return used;
}
