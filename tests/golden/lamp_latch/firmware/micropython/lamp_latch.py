# A test latch: the latch as a machine of integers.
#
# Written by porter 0.1.0 from lamp_latch.yaml, SHA-256
# 0000000000000000000000000000000000000000000000000000000000000000
# Don't edit; remake it with: porter port lamp_latch.yaml -o DIR
#
# Same as the circuit for every sequence of any length.
#
# Made by hand for a test.

try:
    from micropython import const
except ImportError:  # CPython

    def const(value):
        return value


# The time between two steps, in microseconds.
TICK_US = 1000

# Bits of `held`: set while the button is pressed.
_BUTTON_SET = const(1)  # SET
_BUTTON_CLEAR = const(2)  # CLEAR


class LampLatch:
    """A test latch: call step() once a tick."""

    def __init__(self):
        self._q = 0

    def step(self, held):
        """Advance by one tick.

        held: bit i is set while the i-th button is pressed. Returns the active outputs: bit j for the j-th.
        """
        q = self._q
        # The latch by level.
        if held & _BUTTON_CLEAR:
            q = 0
        elif held & _BUTTON_SET:
            q = 1
        self._q = q
        return q

    def idle(self):
        """True: stepping again with the last `held` would change nothing, for ever. Step once before."""
        return True
