# A test latch: the latch as a machine of integers.
#
# Written by porter 0.1.0 from soft_toggle.yaml, SHA-256
# 0000000000000000000000000000000000000000000000000000000000000000
# Don't edit; remake it with: porter port soft_toggle.yaml -o DIR
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
_BUTTON_PUSH = const(1)  # PUSH

# Copy of mem at power-on.
_START = const(0)

# The latch leaves low where the copy is at most this.
# also for: high with PUSH
_LIMIT_LOW_PUSH = const(21845)

# Part of the copy of mem that goes in a tick, as a power of two.
# also for: high with none held
_GOES_OPEN = const(8)

# Part of the copy of mem that goes in a tick, as a power of two.
# also for: high with PUSH
_GOES_PUSH = const(3)

# What the copy of mem gains in a tick.
# also for: high with PUSH
_ADD_PUSH = const(3939)


class SoftToggle:
    """A test latch: call step() once a tick."""

    def __init__(self):
        self._x = _START
        self._q = 0

    def step(self, held):
        """Advance by one tick.

        held: bit i is set while the i-th button is pressed. Returns the active outputs: bit j for the j-th.
        """
        x = self._x
        q = self._q
        # Decide with the charge from before this tick.
        if held & _BUTTON_PUSH:
            if x <= _LIMIT_LOW_PUSH:
                q ^= 1
                x ^= 65535
        # Move the copy of mem by one tick.
        if held & _BUTTON_PUSH:
            x = x - (x >> _GOES_PUSH) + _ADD_PUSH
        else:
            x = x - (x >> _GOES_OPEN)
        self._x = x
        self._q = q
        return q

    def idle(self):
        """True: stepping again with the last `held` would change nothing, for ever. Step once before.

        Said only with the buttons open: to see it with one held would cost the state its last reading.
        """
        x = self._x
        q = self._q
        self.step(0)
        same = x == self._x and q == self._q
        self._x = x
        self._q = q
        return same
