# A test latch: the latch as a machine of integers.
#
# Written by porter 0.1.0 from stair_toggle.yaml, SHA-256
# 0000000000000000000000000000000000000000000000000000000000000000
# Don't edit; remake it with: porter port stair_toggle.yaml -o DIR
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

# Ticks that PUSH must be seen held in a row to count as down.
_PRESS_PUSH = const(5)

# Ticks that PUSH must be seen open in a row to count as up.
_RELEASE_PUSH = const(1)

# Open ticks from a press that acted to the next that acts, latch either.
_TAP = const(110)

# The same after a press held until settled, latch either.
_HOLD = const(40)

# Most that the re-arm counter goes toward HOLD in a held tick, latch either.
_PACE = const(1)


class StairToggle:
    """A test latch: call step() once a tick."""

    def __init__(self):
        self._q = 0
        self._c = 0
        self._n_push = 0

    def step(self, held):
        """Advance by one tick.

        held: bit i is set while the i-th button is pressed. Returns the active outputs: bit j for the j-th.
        """
        q = self._q
        c = self._c
        n_push = self._n_push
        # PUSH: a change counts once seen long enough.
        if held & _BUTTON_PUSH:
            if n_push < _PRESS_PUSH - 1:
                n_push += 1
            else:
                n_push = _PRESS_PUSH + _RELEASE_PUSH - 1
        elif n_push > _PRESS_PUSH:
            n_push -= 1
        else:
            n_push = 0
        # PUSH turns the latch once the re-arm counter has run out.
        if n_push >= _PRESS_PUSH:
            if not c:
                q ^= 1
                c = _TAP
            hold = _HOLD
            pace = _PACE
            if c < hold:
                c = min(c + pace, hold)
            else:
                c = max(c - pace, hold)
        elif c:
            c -= 1
        self._q = q
        self._c = c
        self._n_push = n_push
        return q

    def idle(self):
        """True: stepping again with the last `held` would change nothing, for ever. Step once before."""
        q = self._q
        c = self._c
        n_push = self._n_push
        was = 0
        if self._n_push >= _PRESS_PUSH:
            was |= _BUTTON_PUSH
        self.step(was)
        same = q == self._q and c == self._c and n_push == self._n_push
        self._q = q
        self._c = c
        self._n_push = n_push
        return same
