/* One byte in, one byte out: what every driver does with a core.
 *
 * CORE is the core's name and CORE_HEADER its header, both from the command line. 0xFF starts from
 * power-on and is answered with itself; any other byte is a held mask, answered with the outputs'
 * bits. With 0x40 added to the mask the core is asked whether it is idle: 0x80 in the answer if so.
 */
#include CORE_HEADER

#define EACH_JOIN(a, b) a##b
#define EACH_NAME(a, b) EACH_JOIN(a, b)
#define CORE_T EACH_NAME(CORE, _t)
#define CORE_INIT EACH_NAME(CORE, _init)
#define CORE_STEP EACH_NAME(CORE, _step)
#define CORE_IDLE EACH_NAME(CORE, _idle)

static CORE_T each_core;

static uint8_t each(uint8_t held)
{
    uint8_t answer;

    if (held == 0xFFu) {
        CORE_INIT(&each_core);
        return 0xFFu;
    }
    answer = CORE_STEP(&each_core, held & 0x3Fu);
    if (((held & 0x40u) != 0u) && CORE_IDLE(&each_core)) {
        answer |= 0x80u;
    }
    return answer;
}
