"""The port: a small machine of integers that is stepped once a tick.

The arithmetic here is the definition; the emitted C and MicroPython must do
the same to the bit.  ``held`` is a bit mask (bit i = i-th button of the spec
is pressed), ``q`` is the latch (1 = the timer's output high).

A step does, in this order:

1. *decide*: with the state from before, find the new ``q`` for ``held``
   (at most two flips: a latch that flips back at once stays where it came from);
2. *answer*: the outputs' bits for ``(q, held)``;
3. *move*: counters or capacitor copies advance by one tick in mode ``(q, held)``.
"""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

U16 = 65535


@dataclass(frozen=True, slots=True)
class Constant:
    """One number of the firmware with where it comes from, for the comment beside it.

    Args:
        key: where in the port it stands, such as ``move.q0.SET.end`` (unique in a port).
        value: the integer used.
        meaning: what it is, with unit.
        working: the formula with the values put in and the exact result.
        source: spec lines it came from, such as ``lamp_latch.yaml:14``.
    """

    key: str
    value: int
    meaning: str
    working: str
    source: str


@dataclass(frozen=True, slots=True)
class Test:
    """A flip test on the capacitor copies: ``sum(coeff[k] * X[k])`` against ``limit``.

    ``ge`` True: flips when the sum is at least the limit; False: when it is at most the limit.
    One-capacitor tests always have ``coeff == (1,)`` and a limit in 0..65535; a test that
    always holds is ``X >= 0``.
    For more capacitors coefficients are in -32767..32767 and all sums fit 32 bits.
    """

    coeff: tuple[int, ...]
    ge: bool
    limit: int


@dataclass(frozen=True, slots=True)
class Move:
    """One capacitor copy's motion in one mode, for one tick.

    kind ``hold``: ``X`` stays.
    kind ``jump``: ``X = end``.
    kind ``shift``: moves toward `end` by ``(|X - end| + (1 << shift >> 1)) >> shift``.
    kind ``multiply``: moves toward `end` by ``(|X - end| * rate + 32768) >> 16`` (rate 1..65535).
    kind ``scale``: ``X = (X * rate >> 16) + add``, the same motion with no distance to take: `rate`
    65536ths of the copy stay (0..65535) and `add` brings it to `end`; one multiplication, no sign.
    kind ``drain``: ``X = X - (X >> shift) + add``, a scale by a power of two (shift 1..15).
    `add` of both is such that no copy leaves 0..65535.
    `only` limits these four: ``up`` moves only while ``X < end``, ``down`` only while
    ``X > end`` (an output that only sources or only sinks); elsewhere the copy stays.

    `mirror` True: the whole move is made with ``65535 - X`` in place of ``X`` (not for ``mix``).
    Where both sides of a latch work alike but upside down, a port that stores ``65535 - X`` while q
    is 1 has one code for both; flipping is then a complement.

    kind ``mix`` (more than one capacitor): ``X = clamp(end + sum over j of
    sgn(d_j) * sgn(keep_j) * ((|d_j| * |keep_j| + 32768) >> 16), 0, 65535)`` with
    ``d_j = X_j - ends[j]`` over all capacitors, `keep` in -65535..65535 (65536ths) where
    `keep` of 65536 means exactly one (``d_j`` itself) and `ends` the ends of all capacitors.
    """

    kind: Literal["hold", "jump", "shift", "multiply", "scale", "drain", "mix"]
    end: int
    shift: int = 0
    rate: int = 0
    keep: tuple[int, ...] = ()
    ends: tuple[int, ...] = ()
    only: Literal["both", "up", "down"] = "both"
    add: int = 0
    mirror: bool = False


@dataclass(frozen=True, slots=True)
class ChargeMode:
    """What happens in one ``(q, held)``: when it flips, and how each capacitor copy moves.

    The latch flips where any of `force` holds, or any of `flips` while none of `blocks` does.
    ``always`` in a mode that flips whatever the copies are is `force` with a test that always holds.
    """

    flips: tuple[Test, ...]
    moves: tuple[Move, ...]  # one for each capacitor copy
    force: tuple[Test, ...] = ()
    blocks: tuple[Test, ...] = ()


@dataclass(frozen=True, slots=True)
class Charge:
    """The charge style: integer copies of the capacitors that matter.

    Args:
        capacitors: node names (or ``a-b`` for a capacitor between two free nodes), for comments.
        low_v, scale_v: copy ``X`` stands for ``low_v + X * scale_v`` volt, one entry a capacitor.
        start: the copies at power-on.
        modes: ``modes[q][held]``, shape (2, 2**buttons).
    """

    capacitors: tuple[str, ...]
    low_v: tuple[float, ...]
    scale_v: tuple[float, ...]
    start: tuple[int, ...]
    modes: tuple[tuple[ChargeMode, ...], tuple[ChargeMode, ...]]


@dataclass(frozen=True, slots=True)
class Toggle:
    """A button of the count style that flips the latch, with a re-arm counter.

    The counter ``c`` is the number of open ticks until the next press acts, were the contact
    left open.  It acts when ``c == 0`` and the (filtered) button is down.  On acting, ``q``
    flips and ``c = tap[q]`` for the new ``q``.  Moving: while down, ``c`` goes toward
    ``hold[q]`` by at most ``pace[q]``; while up, ``c`` counts down by one to zero.
    """

    button: int
    tap: tuple[int, int]
    hold: tuple[int, int]
    pace: tuple[int, int]


@dataclass(frozen=True, slots=True)
class Count:
    """The count style: a latch, filters and at most one toggle.

    Args:
        table: ``table[q][down]``: the latch for the filtered buttons by level, before the toggle;
            shape (2, 2**buttons).  The toggle acts only where ``live[down]`` is true.
        live: for each ``down``: whether the toggle can act (no level button overrides it).
        press: ticks that a button must be seen held in a row before it counts as down (>= 1).
        release: ticks that a button must be seen open in a row before it counts as up (>= 1).
        toggle: the toggle, if there is one.
    """

    table: tuple[tuple[int, ...], tuple[int, ...]]
    live: tuple[bool, ...]
    press: tuple[int, ...]
    release: tuple[int, ...]
    toggle: Toggle | None


@dataclass(frozen=True, slots=True)
class Port:
    """A planned port: everything the emitters need, and nothing about where it came from.

    Args:
        name: identifier, ``lamp_latch``; title: for headers; spec_file: file name; spec_sha256.
        buttons, outputs: names in spec order.
        tick_s: the tick in seconds; style: ``count`` or ``charge``.
        start_q: the latch at power-on.
        answer: ``answer[q][held]`` = output bits; shape (2, 2**buttons).
        machine: the style's own part.
        constants: every number in it, with its origin.
        why: sentences on the choices made (style, tick, shifts).
    """

    name: str
    title: str
    spec_file: str
    spec_sha256: str
    buttons: tuple[str, ...]
    outputs: tuple[str, ...]
    tick_s: float
    style: Literal["count", "charge"]
    start_q: int
    answer: tuple[tuple[int, ...], tuple[int, ...]]
    machine: Count | Charge
    constants: tuple[Constant, ...]
    why: tuple[str, ...]

    @property
    def held_count(self) -> int:
        """The number of held combinations, ``2**buttons``."""
        return 1 << len(self.buttons)


#: State of a batch of ports: `q` shape (B,), `regs` shape (B, k) — for charge the copies X; for
#: count: per button the filter's counter, then the filtered ``down`` mask, then the toggle's counter.
@dataclass(frozen=True, slots=True)
class State:
    """The state of a batch of ports."""

    q: NDArray[np.uint8]
    regs: NDArray[np.int64]
