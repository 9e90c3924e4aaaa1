# A test latch: example pin layer.
#
# Written by porter 0.1.0 from lamp_latch.yaml, SHA-256
# 0000000000000000000000000000000000000000000000000000000000000000
# Don't edit; remake it with: porter port lamp_latch.yaml -o DIR
#
# Same as the circuit for every sequence of any length.

# Fit the pin numbers and polarities below to your board; the rest can stay.
# An output needs an external resistor to its safe level: until this file runs, and after a
# reset, the pins float.
import time

import machine
from machine import Pin, WDT

from lamp_latch import TICK_US, LampLatch

# (pin number, level while the button is pressed, 1 = pulled up by the part as well).
BUTTONS = (
    (2, 0, 1),  # SET
    (3, 0, 1),  # CLEAR
)
# (pin number, level while the output is active).
OUTPUTS = (
    (10, 1),  # lamp
)
# A watchdog reset starts the latch in its power-on state, as a power cycle does. Brown-out detection is
# the firmware image's: see that it is on.
WATCHDOG_MS = 2000
# Light sleep while nothing can change, a tick or more at a time; 0 where it upsets your board (some lose USB).
SLEEP_MS = max(TICK_US // 1000, 1)


def read(pins):
    held = 0
    for i in range(len(pins)):
        if pins[i].value() == BUTTONS[i][1]:
            held |= 1 << i
    return held


def write(pins, active):
    for j in range(len(pins)):
        level = OUTPUTS[j][1]
        pins[j].value(level if active >> j & 1 else 1 - level)


def main():
    latch = LampLatch()
    inputs = [Pin(number, Pin.IN, Pin.PULL_UP if pull_up else None) for number, _, pull_up in BUTTONS]
    # The level is set before the direction, so that the output never shows the wrong one.
    first = latch.step(read(inputs))
    outputs = [
        Pin(number, Pin.OUT, value=level if first >> j & 1 else 1 - level)
        for j, (number, level) in enumerate(OUTPUTS)
    ]
    dog = WDT(timeout=WATCHDOG_MS)
    sleep = getattr(machine, "lightsleep", None) if SLEEP_MS else None
    due = time.ticks_add(time.ticks_us(), TICK_US)
    while True:
        if sleep and latch.idle():
            sleep(SLEEP_MS)
            due = time.ticks_us()  # the clock may have stood still, and nothing was due
        # Differences of ticks survive the counter's wrap; a plain comparison would not.
        wait = time.ticks_diff(due, time.ticks_us())
        if wait > 0:
            time.sleep_us(wait)
        due = time.ticks_add(due, TICK_US)
        write(outputs, latch.step(read(inputs)))
        dog.feed()


if __name__ == "__main__":
    main()
