# A test latch: the latch as a machine of integers.
#
# Written by porter 0.1.0 from memo_toggle.yaml, SHA-256
# 0000000000000000000000000000000000000000000000000000000000000000
# Don't edit; remake it with: porter port memo_toggle.yaml -o DIR
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

# Copy of the memory at power-on
# = 0 V / 0.1 mV = 65000
# from memo_toggle.yaml:3
_START = const(65000)

# Upper threshold
# = 2/3 * 65536
# from memo_toggle.yaml:4
_LIMIT_LOW_PUSH = const(40000)

# The latch leaves high where the copy is at most this.
_LIMIT_HIGH_PUSH = const(20000)

# Where the copy of mem goes in the end in this mode.
_END_LOW_OPEN = const(65000)

# Where the copy of mem goes in the end in this mode.
_END_LOW_PUSH = const(36000)

# Where the copy of mem goes in the end in this mode.
_END_HIGH_OPEN = const(300)

# Held level
# = 12 V * 10k/(10k + 5k)
# from memo_toggle.yaml:6
_END_HIGH_PUSH = const(26000)

# Part of its distance that the copy of mem goes in a tick, as a power of two.
# also for: high with none held
_SHIFT_OPEN = const(8)

# Part of its distance that the copy of mem goes in a tick, as a power of two.
# also for: high with PUSH
_SHIFT_PUSH = const(3)


class MemoToggle:
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
            if q:
                if x <= _LIMIT_HIGH_PUSH:
                    q = 0
            elif x >= _LIMIT_LOW_PUSH:
                q = 1
        # Move the copy of mem by one tick.
        if held & _BUTTON_PUSH:
            if q:
                end = _END_HIGH_PUSH
            else:
                end = _END_LOW_PUSH
            shift = _SHIFT_PUSH
        else:
            if q:
                end = _END_HIGH_OPEN
            else:
                end = _END_LOW_OPEN
            shift = _SHIFT_OPEN
        by = end - x if x < end else x - end
        by = (by + (1 << shift >> 1)) >> shift
        x = x + by if x < end else x - by
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
