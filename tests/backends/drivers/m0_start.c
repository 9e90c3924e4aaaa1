/* The least start-up code for an image that has no initialised data; RAM must come up as zeros. */
#include <stdint.h>

extern uint32_t stack_top; /* from the linker script */
int main(void);

void reset(void)
{
    (void)main();
    for (;;) {
        /* main doesn't return */
    }
}

__attribute__((section(".vectors"), used)) static const void *const vectors[2] = {&stack_top, (void *)reset};
