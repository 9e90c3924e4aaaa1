"""A port measured like a product on a bench: what it does for presses, holds and gaps."""

from dataclasses import dataclass

import numpy as np

from porter.circuit.engine import Ints, Mask
from porter.port.model import Charge, Port, State
from porter.port.step import start
from porter.port.swift import stepper

_LONGEST = 200_000  # ticks after which a port that still moves is taken as never settling
_WINDOW = 20_000  # longest window looked for, ticks


@dataclass(frozen=True, slots=True)
class Bench:
    """A port with its settled states.

    Args:
        rest: per latch value the settled state with no button held, None where it doesn't last.
    """

    port: Port
    rest: tuple[State | None, State | None]


def bench(port: Port, copies: tuple[tuple[int, ...], tuple[int, ...]] | None = None) -> Bench:
    """Settle a port in both latch states.

    Args:
        copies: charge style: the circuit's resting copies for each latch value to begin from.
    """
    return Bench(port, (_rest(port, 0, copies), _rest(port, 1, copies)))


def _rest(port: Port, q: int, copies: tuple[tuple[int, ...], tuple[int, ...]] | None) -> State | None:
    regs = np.array([copies[q]], np.int64) if copies is not None else start(port, 1).regs.copy()
    state, settled = settle(port, State(np.array([q], np.uint8), regs), 0)
    return state if settled and state.q[0] == q else None


def settle(port: Port, state: State, held: int) -> tuple[State, bool]:
    """Hold a mask until nothing changes; returns the state and whether it settled (one lane)."""
    masks, step = np.array([held]), stepper(port)
    for tick in range(_LONGEST):
        after, _ = step(state, masks)
        if (after.q == state.q).all() and (after.regs == state.regs).all():
            return after, True
        state = after
        if tick > 5000 and tick % 1000 == 0 and not _moves_on(port, state, held):
            return state, False
    return state, False


def _moves_on(port: Port, state: State, held: int) -> bool:
    """False where the latch turns again and again while nothing is pressed or let go."""
    masks, turns, step = np.array([held]), 0, stepper(port)
    for _ in range(2000):
        after, _ = step(state, masks)
        turns += int(after.q[0] != state.q[0])
        state = after
    return turns < 4


def output_after(port: Port, state: State, held: int) -> str:
    """Return ``low``, ``high`` or ``oscillates`` after holding a mask for ever."""
    state, settled = settle(port, state, held)
    return ("low", "high")[int(state.q[0])] if settled else "oscillates"


def shortest_press(bench: Bench, button: int, q: int) -> int | None:
    """Ticks that a button must be seen held from rest at *q* to change the output, None = never."""
    state = bench.rest[q]
    if state is None:
        return None
    masks, step = np.array([1 << button]), stepper(bench.port)
    for ticks in range(1, _WINDOW):
        after, _ = step(state, masks)
        if after.q[0] != q:
            return ticks
        if (after.regs == state.regs).all():
            return None
        state = after
    return None


def re_arm(bench: Bench, button: int, q: int, held: bool) -> int | None:
    """Fewest open ticks after a tap (or hold) that turned the output to *q* until a press turns it back."""
    port, rest = bench.port, bench.rest[1 - q]
    press = shortest_press(bench, button, 1 - q)
    if rest is None or press is None:
        return None
    state = rest
    for _ in range(press):
        state, _ = stepper(port)(state, np.array([1 << button]))
    if held:
        state, _ = settle(port, state, 1 << button)
    if state.q[0] != q:
        return None
    return _first_gap(port, state, button, q)


def _first_gap(port: Port, state: State, button: int, q: int) -> int | None:
    """Open the contact and look at pressing after each number of ticks, all of them side by side."""
    opened = _openings(port, state)
    gaps = np.arange(1, len(opened.q) + 1)
    acts = _press_acts(port, opened, button, q)
    return int(gaps[np.argmax(acts)]) if acts.any() else None


def _openings(port: Port, state: State) -> State:
    """States after 1, 2, 3 … open ticks until nothing moves."""
    q: list[np.ndarray] = []
    regs: list[np.ndarray] = []
    none, step = np.array([0]), stepper(port)
    for _ in range(_WINDOW):
        after, _ = step(state, none)
        q.append(after.q)
        regs.append(after.regs)
        if (after.q == state.q).all() and (after.regs == state.regs).all():
            break
        state = after
    return State(np.concatenate(q), np.concatenate(regs))


def _press_acts(port: Port, opened: State, button: int, q: int) -> Mask:
    """Whether holding the button from each of these states turns the latch from q within a settling time."""
    masks: Ints = np.full(len(opened.q), 1 << button, np.int64)
    state, acts, step = opened, np.zeros(len(opened.q), bool), stepper(port)
    for _ in range(4000):
        after, _ = step(state, masks)
        acts |= after.q != q
        still = (after.q == state.q) & (after.regs == state.regs).all(axis=1)
        state = after
        if (still | acts).all():
            break
    # A state that turns by itself at this very tick says nothing about the press.
    alone, _ = step(opened, np.zeros(len(opened.q), np.int64))
    return np.asarray(acts & (opened.q == q) & (alone.q == q))


def is_charge(port: Port) -> bool:
    """True for a port that carries capacitor copies."""
    return isinstance(port.machine, Charge)


def stays(bench: Bench, button: int, q: int, quick_s: float) -> int | None:
    """Ticks that the output stays at *q* by itself after a quick press from rest turned it there, None = for good."""
    press = shortest_press(bench, button, 1 - q)
    state = bench.rest[1 - q]
    if state is None or press is None:
        return None
    step = stepper(bench.port)
    held = max(press, round(quick_s / bench.port.tick_s))
    for ticks in range(1, _LONGEST):
        after, _ = step(state, np.array([1 << button if ticks <= held else 0]))
        if ticks > press and after.q[0] != q:
            return ticks - press
        if ticks > held and (after.regs == state.regs).all():
            return None
        state = after
    return None
