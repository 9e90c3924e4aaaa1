/* Drives a core with bytes from standard input, for a coverage measurement; answers go to standard output. */
#include "each.h"

#include <stdio.h>

int main(void)
{
    int held;

    while ((held = getchar()) != EOF) {
        if (putchar(each((uint8_t)held)) == EOF) {
            return 1;
        }
    }
    return 0;
}
