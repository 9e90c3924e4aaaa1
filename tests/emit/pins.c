/* Runs a firmware image for an ATtiny85 and presses its buttons at its pins.
 *
 * Arguments: image.elf, then words "MICROSECONDS:BIT=LEVEL"; prints "MICROSECONDS BIT LEVEL" for
 * each change of port B's driven pins, and "END" when done.
 */
#include <simavr/avr_ioport.h>
#include <simavr/sim_avr.h>
#include <simavr/sim_elf.h>
#include <stdio.h>
#include <stdlib.h>

static avr_t *avr;
static int level_of[8];

static void no_wait(avr_t *a, avr_cycle_count_t cycles)
{
    (void)a;
    (void)cycles;
}

static void look(void)
{
    avr_ioport_state_t port;
    avr_ioctl(avr, AVR_IOCTL_IOPORT_GETSTATE('B'), &port);
    for (int bit = 0; bit < 5; bit++) {
        int level = (port.ddr >> bit & 1) ? (int)(port.port >> bit & 1) : -1;
        if (level != level_of[bit]) {
            printf("%lu %d %d\n", (unsigned long)avr->cycle, bit, level);
            level_of[bit] = level;
        }
    }
}

static int run_until(unsigned long cycle)
{
    while (avr->cycle < cycle) {
        int state = avr_run(avr);
        if (state == cpu_Done || state == cpu_Crashed) {
            printf("STOPPED %d at %lu\n", state, (unsigned long)avr->cycle);
            return 1;
        }
        look();
    }
    return 0;
}

/* Drive a pin from outside, against its pull-up. */
static void set_pin(int bit, int level)
{
    static avr_ioport_external_t outside = {.name = 'B', .mask = 0, .value = 0};
    avr_irq_t *pin = avr_io_getirq(avr, AVR_IOCTL_IOPORT_GETIRQ('B'), bit);

    outside.mask |= 1u << bit;
    outside.value = level ? outside.value | 1u << bit : outside.value & ~(1u << bit);
    avr_ioctl(avr, AVR_IOCTL_IOPORT_SET_EXTERNAL('B'), &outside);
    avr_raise_irq(pin, (uint32_t)level);
}

int main(int argc, char **argv)
{
    elf_firmware_t firmware = {0};
    unsigned long at;
    int bit, level;

    if (argc < 2 || elf_read_firmware(argv[1], &firmware) != 0) {
        return 2;
    }
    avr = avr_make_mcu_by_name("attiny85");
    avr_init(avr);
    firmware.frequency = 1000000;
    avr_load_firmware(avr, &firmware);
    avr->sleep = no_wait;
    for (bit = 0; bit < 8; bit++) {
        level_of[bit] = -1;
    }
    for (int i = 2; i < argc; i++) {
        if (sscanf(argv[i], "%lu:%d=%d", &at, &bit, &level) != 3 || run_until(at) != 0) {
            return 1;
        }
        set_pin(bit, level);
    }
    puts("END");
    return 0;
}
