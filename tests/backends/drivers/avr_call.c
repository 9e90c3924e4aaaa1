/* Calls a core's functions in an emulated ATtiny85, one call at a time, and counts their cycles.
 *
 * Arguments: image.elf, then the byte addresses of init, step, idle and of the state. Bytes as in
 * each.h from in.bin to out.bin. Prints the least and the most cycles of step, from its first
 * instruction to the end of its return; the call itself takes three more.
 */
#include <simavr/sim_avr.h>
#include <simavr/sim_core.h>
#include <simavr/sim_elf.h>
#include <stdio.h>
#include <stdlib.h>

#define BACK 0x1FFEu /* the last word of flash: no code there; a return to it ends a call */
#define SPL 0x5Du
#define SPH 0x5Eu
#define MOST_CYCLES 100000u

static avr_t *avr;
static unsigned long state;

static void push(uint8_t value)
{
    unsigned at = avr->data[SPL] | (unsigned)avr->data[SPH] << 8;

    avr->data[at] = value;
    at--;
    avr->data[SPL] = (uint8_t)at;
    avr->data[SPH] = (uint8_t)(at >> 8);
}

/* The calling convention of avr-gcc: first argument in r25:r24, second in r22, result in r24, r1 is zero. */
static unsigned long call(unsigned long function, uint8_t held)
{
    avr_cycle_count_t start = avr->cycle;

    avr->data[SPL] = (uint8_t)avr->ramend;
    avr->data[SPH] = (uint8_t)(avr->ramend >> 8);
    push((BACK / 2u) & 0xFFu);
    push((BACK / 2u) >> 8);
    avr->data[1] = 0u;
    avr->data[22] = held;
    avr->data[24] = (uint8_t)state;
    avr->data[25] = (uint8_t)(state >> 8);
    avr->pc = (avr_flashaddr_t)function;
    while (avr->pc != BACK) {
        avr->pc = avr_run_one(avr);
        if (avr->state == cpu_Crashed || avr->cycle - start > MOST_CYCLES) {
            fprintf(stderr, "a call to %lx did not return\n", function);
            exit(1);
        }
    }
    if ((avr->data[SPL] | avr->data[SPH] << 8) != avr->ramend) {
        fprintf(stderr, "a call to %lx left the stack unbalanced\n", function);
        exit(1);
    }
    return (unsigned long)(avr->cycle - start);
}

int main(int argc, char **argv)
{
    elf_firmware_t firmware = {0};
    unsigned long at[4], least = MOST_CYCLES, most = 0u, spent;
    FILE *in = fopen("in.bin", "rb"), *out = fopen("out.bin", "wb");
    int held;

    if (argc != 6 || !in || !out || elf_read_firmware(argv[1], &firmware) != 0) {
        return 2;
    }
    for (int i = 0; i < 4; i++) {
        at[i] = strtoul(argv[2 + i], NULL, 0);
    }
    state = at[3];
    avr = avr_make_mcu_by_name("attiny85");
    avr_init(avr);
    firmware.frequency = 1000000;
    avr_load_firmware(avr, &firmware);
    while ((held = getc(in)) != EOF) {
        if (held == 0xFF) {
            call(at[0], 0u);
            putc(0xFF, out);
            continue;
        }
        spent = call(at[1], (uint8_t)held & 0x3Fu);
        least = spent < least ? spent : least;
        most = spent > most ? spent : most;
        uint8_t answer = avr->data[24];
        if (held & 0x40) {
            call(at[2], 0u);
            answer |= avr->data[24] ? 0x80 : 0;
        }
        putc(answer, out);
    }
    printf("%lu %lu\n", least, most);
    return fclose(out) == 0 ? 0 : 1;
}
