"""The port against all allowed units at once: what every unit does, the port must do.

A set of units that stands for the family is run exactly through press sequences
whose presses and gaps sit at the edges of the windows.  Per sequence and edge
number there are three bands: every unit has that edge (*always*), none has it
(*never*), or units differ (*either*).  The port must have an *always* edge, of
the same polarity, within the units' own times and a stated delay; it may not
have a *never* edge; in an *either* band it is free.

The comparison of edges by their number is a Skorokhod distance on binary traces
(J. Deshmukh, R. Majumdar, V. Prabhu, CAV 2015): a glitch can't hide between samples.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from porter.behaviour.model import Behaviour
from porter.circuit.engine import Engine, Ints
from porter.circuit.values import Floats, columns
from porter.parity.model import FamilyCheck
from porter.port.model import Port
from porter.port.step import start
from porter.port.swift import stepper
from porter.spec.model import Circuit

MOST_EDGES = 24  # edges of a trace that are compared
_LENGTHS = 9  # different lengths of presses and gaps
_HAND_S = 0.04  # a quick press of a person (common practice)


class Machine(Protocol):
    """Anything that answers held masks tick by tick; states are whatever it likes."""

    @property
    def tick_s(self) -> float:
        """Length of a tick, seconds."""

    @property
    def held_count(self) -> int:
        """Number of held masks."""

    def begin(self, lanes: int) -> Any:
        """Return the power-on state of some lanes."""

    def step(self, state: Any, held: Ints) -> tuple[Any, Ints]:
        """Advance by a tick; returns the state and the latch of each lane."""


class PortMachine:
    """A port as a machine."""

    def __init__(self, port: Port) -> None:
        self.port, self.start_q = port, port.start_q
        self._step = stepper(port)

    @property
    def tick_s(self) -> float:
        """Length of a tick, seconds."""
        return self.port.tick_s

    @property
    def held_count(self) -> int:
        """Number of held masks."""
        return self.port.held_count

    def begin(self, lanes: int) -> Any:
        """Return the power-on state of some lanes."""
        return start(self.port, lanes)

    def step(self, state: Any, held: Ints) -> tuple[Any, Ints]:
        """Advance by a tick."""
        after, _ = self._step(state, held)
        return after, after.q.astype(np.int64)


#: Press sequences: held masks and lengths in nominal ticks, both of shape (S, segments); length 0 = unused.
@dataclass(frozen=True, slots=True)
class Presses:
    """A batch of press sequences."""

    masks: Ints
    ticks: Ints

    def __len__(self) -> int:
        return len(self.masks)


def check_family(
    circuit: Circuit,
    behaviour: Behaviour,
    machine: Machine,
    *,
    start_q: int,
    count: int = 240,
    seed: int = 7,
    early_s: float = 0.0,
) -> FamilyCheck:
    """Run units and machine through press sequences and compare their edges.

    Args:
        machine: the port, or anything that claims to be one.
        start_q: the latch that units start with where nothing forces it.
        count: sequences; seed: of the ones that are drawn.
        early_s: how much earlier than every unit a port may act (its own rounding).
    """
    rows = units(circuit, behaviour)
    presses = sequences(behaviour, machine, count, seed)
    wrong, share, clocks = compare(circuit, rows, machine, presses, start_q, early_s)
    always, either = int((share == 1.0).sum()), int(((share > 0) & (share < 1)).sum())
    witness = _shortest(presses, wrong) if wrong.any() else None
    said = (
        f"{len(presses):,} press sequences were run through {len(rows)} units that span the family and through the port with its "
        f"clock at {', '.join(f'{c:.3g}' for c in clocks)} of nominal: {always:,} edges that every unit has, {either:,} that some have; "
        + (
            f"the port left these bands in {int(wrong.sum())} sequences"
            if wrong.any()
            else "the port kept within them"
        )
    )
    return FamilyCheck(len(presses), len(rows), clocks, always, either, int(wrong.sum()), witness, said)


def compare(
    circuit: Circuit, rows: Floats, machine: Machine, presses: Presses, start_q: int, early_s: float
) -> tuple[NDArray[np.bool_], Floats, tuple[float, ...]]:
    """Run units and machine through sequences.

    Returns:
        Which sequences the machine answers as no unit does, the share of units that have each edge,
        and the clocks that the machine was run with.
    """
    first, last, share = _bands(circuit_edges(circuit, rows, presses, machine.tick_s, start_q))
    clocks = tuple(sorted({1 - circuit.port.clock, 1.0, 1 + circuit.port.clock}))
    wrong = np.zeros(len(presses), bool)
    runs = machine_edges(machine, presses, np.array(clocks))
    for clock, edges in zip(clocks, runs, strict=True):
        early, late = machine.tick_s * clock + early_s, 2 * machine.tick_s * clock + 1e-12
        wrong |= _violates(edges, first, last, share, early, late, presses, machine.tick_s)
    return wrong, share, clocks


def units(circuit: Circuit, behaviour: Behaviour) -> Floats:
    """Return the units that stand for the family: nominal, and those at the ends of windows and margins."""
    rows = behaviour.extra.get("units")
    return np.asarray(rows) if rows is not None else columns(circuit).nominal[None, :]


# --- sequences ---


def lengths(behaviour: Behaviour, machine: Machine) -> Ints:
    """Return lengths in ticks worth trying: two ticks, a quick hand, and both sides of every window.

    A press of less than two ticks may fall between two samples of a slow clock: that deafness is
    the ledger's row *shortest-press*, and is not looked for again here.
    """
    tick = machine.tick_s
    found = {2, max(2, round(_HAND_S / tick))}
    longest = 4 * _HAND_S
    for window in behaviour.windows:
        band = window.guaranteed
        for value, factor in ((band.least, 0.9), (band.nominal, 0.6), (band.most, 1.12)):
            if value:
                found.add(max(2, int(value * factor / tick)))
                longest = max(longest, value)
    for timed in behaviour.timed:
        for value, factor in ((timed.guaranteed.least, 0.6), (timed.guaranteed.most, 1.12)):
            if value:
                found.add(max(2, int(value * factor / tick)))
                longest = max(longest, value)
    found |= {max(2, round(2.5 * longest / tick)), max(2, round(_slow(behaviour) / tick))}
    ordered = sorted(found)
    while len(ordered) > _LENGTHS:
        ratios = [b / a for a, b in pairwise(ordered)]
        del ordered[1 + int(np.argmin(ratios[:-1]))]
    return np.array(ordered, np.int64)


def _slow(behaviour: Behaviour) -> float:
    value = behaviour.extra.get("slowest_s", 0.0)
    return 1.5 * float(value) if isinstance(value, float) else 0.0


def sequences(behaviour: Behaviour, machine: Machine, count: int, seed: int) -> Presses:
    """Return press sequences: every press-gap-press of the lengths as far as they go, then drawn ones."""
    long = lengths(behaviour, machine)
    rng = np.random.default_rng(seed)
    rows = list(_short_ones(long, machine.held_count))
    rng.shuffle(rows)
    rows = rows[: count // 2]
    while len(rows) < count:
        rows.append(_drawn(long, machine.held_count, rng))
    return laid_out(rows, int(long[-1]))


def laid_out(rows: Sequence[Sequence[tuple[int, int]]], rest: int) -> Presses:
    """Lay sequences of (mask, ticks) out as arrays, each followed by *rest* open ticks so that late edges are seen."""
    width = max(len(r) for r in rows) + 1
    masks, ticks = np.zeros((len(rows), width), np.int64), np.zeros((len(rows), width), np.int64)
    for i, row in enumerate(rows):
        ends = [*row, (0, rest)]
        masks[i, : len(ends)] = [m for m, _ in ends]
        ticks[i, : len(ends)] = [t for _, t in ends]
    return Presses(masks, ticks)


def _short_ones(long: Ints, masks: int) -> Iterator[tuple[tuple[int, int], ...]]:
    rest = (0, int(long[-1]))
    for mask in range(1, masks):
        for d in long.tolist():
            yield ((mask, d),)
            for g in long.tolist():
                yield (rest, (mask, d), (0, g), (mask, int(long[-1])))
                other = (mask * 5 + 1) % (masks - 1) + 1 if masks > 2 else mask
                yield ((mask, d), (0, g), (mask, d), (0, g), (other, d))


def _drawn(long: Ints, masks: int, rng: np.random.Generator) -> tuple[tuple[int, int], ...]:
    count = int(rng.integers(2, 7))
    out: list[tuple[int, int]] = []
    for _ in range(count):
        before = out[-1][0] if out else -1
        mask = int(rng.integers(0, masks))
        if mask == before:
            mask = (mask + 1) % masks
        out.append((mask, int(long[rng.integers(0, len(long))])))
    return tuple(out)


# --- traces ---


def circuit_edges(circuit: Circuit, rows: Floats, presses: Presses, tick_s: float, start_q: int) -> Floats:
    """Run every unit through every sequence; returns edge times, shape (units, sequences, MOST_EDGES), inf = none."""
    engine = Engine(circuit, rows)
    count, many = len(rows), len(presses)
    lanes = engine.empty(start_q, np.repeat(np.arange(count), many))
    engine.resolve(lanes)
    times = np.full((count * many, MOST_EDGES), np.inf)
    used = np.zeros(count * many, np.int64)
    begin = lanes.q.copy()

    def listen(at: Ints, when: Floats, _: Ints) -> None:
        room = used[at] < MOST_EDGES
        times[at[room], used[at[room]]] = when[room]
        used[at] += 1

    for k in range(presses.masks.shape[1]):
        engine.press(lanes, np.tile(presses.masks[:, k], count), listen)
        engine.run(lanes, np.tile(presses.ticks[:, k] * tick_s, count), listener=listen)
        lanes.busy[:] = False
    return _from(start_q, begin, times).reshape(count, many, MOST_EDGES)


def _from(start_q: int, begin: Ints, times: Floats) -> Floats:
    """Count a latch that is already the other way as an edge at the start, so that polarities line up."""
    moved = begin != start_q
    out = times.copy()
    out[moved, 1:] = times[moved, :-1]
    out[moved, 0] = 0.0
    return out


def machine_edges(machine: Machine, presses: Presses, clocks: Floats) -> Floats:
    """Run a machine through every sequence with every clock, all beside each other.

    Args:
        clocks: shape (C,), how long a real tick is in nominal ticks.

    Returns:
        Edge times in real seconds, shape (C, sequences, MOST_EDGES), inf = none.
    """
    many, count = len(presses), len(clocks) * len(presses)
    ends = np.tile(np.cumsum(presses.ticks, axis=1), (len(clocks), 1))
    masks, clock = np.tile(presses.masks, (len(clocks), 1)), np.repeat(clocks, many)
    state = machine.begin(count)
    times = np.full((count, MOST_EDGES), np.inf)
    used = np.zeros(count, np.int64)
    rows = np.arange(count)
    last = np.full(count, _first(machine))
    segment = np.zeros(count, np.int64)
    for tick in range(int(np.ceil(ends[:, -1].max() / clocks.min()))):
        now = tick * clock
        while True:  # segments of length 0 are stepped over
            over = (ends[rows, segment] <= now + 1e-9) & (segment < ends.shape[1] - 1)
            if not over.any():
                break
            segment += over
        state, q = machine.step(state, masks[rows, segment])
        turned = np.flatnonzero((q != last) & (used < MOST_EDGES) & (now <= ends[:, -1]))
        times[turned, used[turned]] = now[turned] * machine.tick_s
        used[turned] += 1
        last = q
    return times.reshape(len(clocks), many, MOST_EDGES)


def _first(machine: Machine) -> int:
    """The level that a machine shows before its first tick; low where it doesn't say."""
    return int(getattr(machine, "start_q", 0))


def _bands(times: Floats) -> tuple[Floats, Floats, Floats]:
    """Return for each sequence and edge number: earliest and latest unit, and the share of units that have it."""
    have = np.isfinite(times)
    share = have.mean(axis=0)
    first = times.min(axis=0)
    last = np.where(have, times, -np.inf).max(axis=0)
    return first, last, share


def _violates(
    edges: Floats,
    first: Floats,
    last: Floats,
    share: Floats,
    early: float,
    late: float,
    presses: Presses,
    tick_s: float,
) -> NDArray[np.bool_]:
    """Return which sequences the machine answers as no allowed unit does."""
    has = np.isfinite(edges)
    end = presses.ticks.sum(axis=1)[:, None] * tick_s
    with np.errstate(invalid="ignore"):
        early_or_late = has & (share > 0) & ((edges < first - early) | (edges > last + late))
        missing = ~has & (share == 1.0) & (last + late < end)
        extra = has & (share == 0.0)
    # Once units differ in how many edges they have, later edges of theirs don't line up by number.
    clear = np.cumsum((share > 0) & (share < 1), axis=1) == 0
    return np.asarray(((early_or_late | missing | extra) & clear).any(axis=1))


def _shortest(presses: Presses, wrong: NDArray[np.bool_]) -> tuple[int, ...]:
    """Write out the wrong sequence that is over soonest, held mask by tick."""
    at = np.flatnonzero(wrong)
    used = (presses.ticks[at] > 0).sum(axis=1)
    best = at[np.lexsort((presses.ticks[at].sum(axis=1), used))[0]]
    out: list[int] = []
    for mask, ticks in zip(presses.masks[best], presses.ticks[best], strict=True):
        out += [int(mask)] * int(ticks)
    return tuple(out)
