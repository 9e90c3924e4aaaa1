/* Links a core into an image with room for its state; the emulator calls the functions itself. */
#include "each.h"

int main(void)
{
    for (uint8_t held = 0u;; held++) {
        (void)each(held);
    }
}
