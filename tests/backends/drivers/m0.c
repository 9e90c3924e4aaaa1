/* Drives a core on a Cortex-M0 with semihosting: file in.bin to file out.bin. */
#include "each.h"

extern uint32_t stack_top; /* from the linker script */

#define HOST_OPEN 0x01u
#define HOST_WRITE 0x05u
#define HOST_READ 0x06u
#define HOST_EXIT 0x18u
#define MODE_READ 1u  /* rb */
#define MODE_WRITE 5u /* wb */

static uint8_t block[4096];

static int32_t host(uint32_t what, const void *with)
{
    register uint32_t r0 __asm("r0") = what;
    register const void *r1 __asm("r1") = with;

    __asm volatile("bkpt 0xAB" : "+r"(r0) : "r"(r1) : "memory");
    return (int32_t)r0;
}

static int32_t open(const char *name, uint32_t mode)
{
    struct { const char *name; uint32_t mode, length; } with = {name, mode, 0u};

    while (name[with.length] != '\0') {
        with.length++;
    }
    return host(HOST_OPEN, &with);
}

/* Both calls return the number of bytes that were not read or written. */
static uint32_t move(uint32_t what, int32_t file, uint32_t count)
{
    struct { int32_t file; uint8_t *at; uint32_t count; } with = {file, block, count};

    return (uint32_t)host(what, &with);
}

void reset(void)
{
    int32_t in = open("in.bin", MODE_READ);
    int32_t out = open("out.bin", MODE_WRITE);
    uint32_t count, i;

    while ((count = sizeof block - move(HOST_READ, in, sizeof block)) != 0u) {
        for (i = 0u; i < count; i++) {
            block[i] = each(block[i]);
        }
        (void)move(HOST_WRITE, out, count);
    }
    (void)host(HOST_EXIT, (const void *)0x20026u); /* the application ended by itself */
    for (;;) {
        /* stopped */
    }
}

__attribute__((section(".vectors"), used)) static const void *const vectors[2] = {&stack_top, (void *)reset};
