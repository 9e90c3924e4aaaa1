/* Drives a core in an emulator that reads and writes files through one cell of memory; 0xFE ends. */
#include "each.h"

#if defined(__SDCC_mcs51)
#define CELL (*(volatile uint8_t __xdata *)0xFFFF)
#elif defined(__SDCC_stm8)
#define CELL (*(volatile uint8_t *)0x5FFF)
#elif defined(__SDCC_pdk15)
static volatile uint8_t __at(0xFF) cell;
#define CELL cell
#elif defined(__SDCC_pdk14)
static volatile uint8_t __at(0x7F) cell;
#define CELL cell
#else
#error "no cell known for this part"
#endif

void main(void)
{
    uint8_t held;

    for (;;) {
        CELL = 'r';
        held = CELL;
        if (held == 0xFEu) {
            break;
        }
        held = each(held);
        CELL = 'w';
        CELL = held;
    }
    CELL = 's';
    for (;;) {
        /* stopped */
    }
}
