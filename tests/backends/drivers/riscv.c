/* Drives a core as a Linux process on RISC-V: standard input to standard output. */
#include "each.h"

/* A system call's number goes to register 17, which RV32E doesn't have and its assembler refuses:
 * the one move into it is a word of its own. The emulator has all 32 registers. */
__asm(".globl call3\n"
      "call3:\n"
      "    mv t0, a0\n"
      "    mv a0, a1\n"
      "    mv a1, a2\n"
      "    mv a2, a3\n"
      "    .word 0x00028893\n" /* addi x17, x5, 0 */
      "    ecall\n"
      "    ret\n");
long call3(long number, long a, void *b, long c);

#define CALL_READ 63
#define CALL_WRITE 64
#define CALL_EXIT 93

static uint8_t block[4096];

void _start(void)
{
    long count, done, i;

    while ((count = call3(CALL_READ, 0, block, sizeof block)) > 0) {
        for (i = 0; i < count; i++) {
            block[i] = each(block[i]);
        }
        for (i = 0; i < count; i += done) {
            done = call3(CALL_WRITE, 1, block + i, count - i);
            if (done <= 0) {
                call3(CALL_EXIT, 3, 0, 0);
            }
        }
    }
    call3(CALL_EXIT, (count < 0) ? 2 : 0, 0, 0);
}
